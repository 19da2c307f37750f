"""Instruments that obey their link only after they were told to: the option `remote`."""

from __future__ import annotations

from pathlib import Path

import pytest

from sweeprig.conduct.rig import RigUse, build_adapter
from sweeprig.conduct.states import State
from sweeprig.errors import ConfigError
from sweeprig.holds import Status
from sweeprig.job import load
from sweeprig.launch import start
from sweeprig.opened import open_run
from sweeprig.roles import Answer


def local_at_power_on(job: Path, option: str) -> Path:
    """The short job with a supply that begins in local, and `option` in its table of options."""
    rig = job.parent / "shelter-bench.toml"
    text = rig.read_text("utf-8")
    head, mark, tail = text.partition("[instruments.supply]")
    assert mark
    lines = tail.splitlines()
    at = next(number for number, line in enumerate(lines) if line.startswith("adapter"))
    lines[at] += option
    text = head + mark + "\n".join(lines) + "\n"
    if "[simulated.supply]" in text:
        text = text.replace("[simulated.supply]", "[simulated.supply]\nlocal_at_power_on = 1")
    else:
        text += "\n[simulated.supply]\nlocal_at_power_on = 1\n"
    rig.write_text(text, "utf-8")
    return job


def test_a_supply_in_local_is_told_to_obey(short_job: Path, tmp_path: Path) -> None:
    """With `remote = "ask"` the sweep runs to its end on a supply that begins in local."""
    job = local_at_power_on(short_job, '\noptions = { remote = "ask" }')
    assert start(job, tmp_path / "runs").ending.state is State.FINISHED


def test_without_the_option_it_is_refused(short_job: Path, tmp_path: Path) -> None:
    """Left in local it refuses its settings; no hold counts, and the run does not finish."""
    job = local_at_power_on(short_job, "")
    launched = start(job, tmp_path / "runs")
    outcomes = open_run(launched.path).outcomes
    assert {outcome.status for outcome in outcomes} == {Status.DISCARDED}
    assert "-203" in outcomes[-1].reason
    assert launched.ending.state is State.WAITING_FOR_PERSON


def test_switching_off_comes_after_remote(short_job: Path) -> None:
    """A person may have turned it to local meanwhile: before the output is told to be off it is told to obey."""
    job = load(local_at_power_on(short_job, '\noptions = { remote = "ask" }'))
    steps = build_adapter(RigUse.of_job(job), "supply").switch_off()
    sent = [next(steps)]
    sent.append(steps.send(Answer(b"", 0.0)))
    assert [ask.message for ask in sent] == [b"SYST:REM", b"OUTP OFF"]
    assert all(ask.early for ask in sent)


def test_a_dialect_must_say_how(short_job: Path) -> None:
    """ConfigError when the option is set and the dialect has no such command."""
    job = local_at_power_on(short_job, '\noptions = { remote = "ask" }')
    folder = job.parent / "dialects"
    folder.mkdir()
    import sweeprig_drivers

    shipped = Path(sweeprig_drivers.__file__).parent / "dialects" / "source-and-measure.toml"
    mine = shipped.read_text("utf-8").replace('remote = "SYST:REM"\n', "")
    (folder / "mine.toml").write_text(mine, "utf-8")
    rig = job.parent / "shelter-bench.toml"
    rig.write_text(rig.read_text("utf-8").replace('"source-and-measure"', '"mine"'), "utf-8")
    with pytest.raises(ConfigError, match="told to obey its link"):
        build_adapter(RigUse.of_job(load(job)), "supply")
