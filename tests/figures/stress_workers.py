"""Work of the stress figures that needs an interpreter of its own; each prints one JSON object on its last line."""

from __future__ import annotations

import json
import resource
import sys
from collections.abc import Mapping
from pathlib import Path
from typing import Any, cast

import sweeprig.simbench
from sweeprig.clock import SystemClock
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.heal import heal
from sweeprig.conduct.rig import RigUse, open_rig
from sweeprig.conduct.states import Event, Orders
from sweeprig.errors import RunError
from sweeprig.holds import Outcome
from sweeprig.job import Job, load, shipped
from sweeprig.launch import resume, start
from sweeprig.opened import Run, open_run

WARM = 100
"""Cycles before memory counts: caches fill, the allocator takes what it will keep."""
RIG = "rigs/shelter-bench.toml"
HOUR_S = 3600.0


def rss_mb() -> float:
    """Resident now, not at its highest."""
    pages = int(Path("/proc/self/statm").read_text("ascii").split()[1])
    return round(pages * resource.getpagesize() / 2**20, 1)


def descriptors() -> int:
    return len(list(Path("/proc/self/fd").iterdir()))


def shown(outcome: Outcome) -> list[Any]:
    """Enough to know it again: number, status, verdict and times."""
    return [outcome.number, str(outcome.status), str(outcome.verdict), outcome.began, outcome.ended]


def limited(bytes_: int) -> None:
    """No file of this process may become larger; 0: any."""
    if bytes_:
        resource.setrlimit(resource.RLIMIT_FSIZE, (bytes_, resource.getrlimit(resource.RLIMIT_FSIZE)[1]))


def fill(runs: str, bytes_: str) -> dict[str, Any]:
    """The demo until the disk is full; what was concluded and committed by then, and whether the drive is on."""
    limited(int(bytes_))
    benches: list[Any] = []
    build = sweeprig.simbench.build

    def built(*arguments: Any, **more: Any) -> Any:
        benches.append(build(*arguments, **more))
        return benches[-1]

    sweeprig.simbench.build = built
    seen: list[list[Any]] = []
    place = Path(runs)

    def listen(event: Event) -> None:
        if event.kind == "hold_began":  # by now whatever came before it is committed
            seen[:] = [shown(outcome) for outcome in run_in(place).outcomes]

    error = ""
    try:
        start(quick_job(place.parent), place, on_event=listen)
    except RunError as caught:
        error = type(caught).__name__
    on = False
    if benches:
        drive = [one.what for one in benches[0].record if one.what.startswith("drive")]
        on = bool(drive) and drive[-1] == "drive_on"
    there = place.is_dir() and any((folder / "logbook.sqlite").exists() for folder in place.iterdir())
    return {"error": error, "outcomes": seen, "drive_on": on, "folder": there}


def quick_job(folder: Path) -> Job:
    """About an hour of short trials on the motor that is a law."""
    return prescribed(folder, {'pwm = ["300 Hz", "1 kHz", "25 kHz"]': 'pwm = ["1 kHz"]', '"4 min"': '"10 s"'})


def run_in(place: Path) -> Run:
    (folder,) = place.iterdir()
    return open_run(folder)


def go_on(runs: str) -> dict[str, Any]:
    """The run resumed to its end."""
    (folder,) = Path(runs).iterdir()
    state = resume(folder).ending.state.words
    run = open_run(folder)
    return {"outcomes": [shown(o) for o in run.outcomes], "unfinished": len(run.unfinished), "state": state}


def reopen(job: str, cycles: str) -> dict[str, Any]:
    """All links of a rig lost and healed so often; growth after the first hundred."""
    loaded = load(Path(job))
    rig = open_rig(RigUse.of_job(loaded), SystemClock(loaded.rig.rate or 1.0))
    at: Mapping[str, Any] = {}
    try:
        for cycle in range(int(cycles)):
            for link in rig.links.values():
                link.close()
            heal(rig, {}, lambda: None)
            if cycle == WARM:
                at = {"rss": rss_mb(), "descriptors": descriptors()}
        grown = {"rss_grown_mb": round(rss_mb() - at["rss"], 1), "descriptors_grown": descriptors() - at["descriptors"]}
    finally:
        rig.close()
    return {**grown, "cycles": int(cycles), "links": len(rig.links), "from_cycle": WARM}


def days(folder: str, hours: str) -> dict[str, Any]:
    """A long run on the motor that is a law: memory and descriptors after each third."""
    cast(dict[str, float], BOUNDS)["trial_window_s"] = 2.0  # half the exchanges of the night, all else as it is
    orders, until_h = Orders(), float(hours)
    rss: list[tuple[int, float]] = []
    open_: list[int] = []
    holds: list[int] = []

    def listen(event: Event) -> None:
        if event.kind != "hold_ended":
            return
        hour = event.at / HOUR_S
        if hour >= (len(rss) + 1) * until_h / 3.0:
            rss.append((round(hour), rss_mb()))
            open_.append(descriptors())
            holds.append(int(str(event.data["number"])))
            orders.finish = len(rss) == 3

    launched = start(long_job(Path(folder)), Path(folder, "runs"), on_event=listen, orders=orders)
    last = open_run(launched.path).outcomes[-1]
    return {
        "rss_mb": rss, "descriptors": open_, "holds": last.number, "holds_between": holds[-1] - holds[0],
        "hours": round(last.ended / HOUR_S, 1), "state": launched.ending.state.words,
    }  # fmt: skip


def long_job(folder: Path) -> Job:
    """Stall trials of a minute and a half, more of them than any run has time for."""
    return prescribed(
        folder,
        {
            'pwm = ["300 Hz", "1 kHz", "25 kHz"]': 'pwm = ["1 kHz"]',
            'search = "adaptive"\nhold_time = "20 s"\nstandard_error = "0.3 %"': (
                'search = "ladder"\nhold_time = "90 s"\nholds = 10000'
            ),
        },
    )


def prescribed(folder: Path, changes: dict[str, str]) -> Job:
    """The shelter's bench without its scope and the motor that is a law, with the evening's sweep changed; its files
    lie in `folder`."""
    demo = shipped("demo").parent
    rig = (demo / RIG).read_text("utf-8")
    scope = rig.index("[instruments.scope]")
    after = rig.find("\n[", scope)
    rig = rig[:scope] + ("" if after < 0 else rig[after:])
    rig = "\n".join(line for line in rig.splitlines() if '"scope.' not in line).replace('"0.2 s"', '"1 s"')
    (folder / "rig.toml").write_text(rig, "utf-8")
    text = (demo / "sweeps/evening.toml").read_text("utf-8")
    for was, to in changes.items():
        assert was in text, was
        text = text.replace(was, to)
    sweep = folder / "sweep.toml"
    sweep.write_text(text, "utf-8")
    uses = {"rig": folder / "rig.toml", "motor": demo / "motors/prescribed-fan.toml", "sweep": sweep}
    lines = ['title = "stress"', *(f'{key} = "{path.as_posix()}"' for key, path in uses.items())]
    (folder / "job.toml").write_text("\n".join(lines) + "\n", "utf-8")
    return load(folder / "job.toml")


if __name__ == "__main__":
    print(json.dumps(globals()[sys.argv[1]](*sys.argv[2:])))
