"""From a job file to a checked Job: reads it and the files it names, and refuses with one error at a time.

Checks of single values are the models', checks across tables cross_checks.py's. No link, no adapter, no clock.
"""

from __future__ import annotations

from pathlib import Path

from pydantic import ValidationError

from sweeprig.errors import ConfigError, RoleMissing, Where
from sweeprig.job.amounts import as_written
from sweeprig.job.cross_checks import cross_checks
from sweeprig.job.models import Job
from sweeprig.job.problems import PARTS, Sources, problems
from sweeprig.job.rig_models import Rig
from sweeprig.job.toml_source import Source, parse, read

_MARKS = {
    "instruments": "rig",
    "nominal_voltage": "motor",
    "pwm": "sweep",
    "rig": "job",
    "motor": "job",
    "sweep": "job",
}
"""Keys that stand in one kind of file only."""


def load(path: Path | str) -> Job:
    """Read and check the job at `path`. `rig`, `motor` and `sweep` name files relative to it, or are tables in it.

    ConfigError (RoleMissing, …) says the first thing that is wrong, with file, line and key, and how many more are.
    """
    path = Path(path)
    return _checked(read(path), path.parent)


def load_text(text: str, file: str = "job.toml", folder: Path | None = None) -> Job:
    """Like `load`, from a text; `file` is its name in errors, `folder` where the files it names lie (default: here)."""
    return _checked(parse(text, file), folder or Path())


def load_rig(path: Path | str) -> tuple[Rig, Path]:
    """Read and check a rig file by itself, for switching it off: the rig, and the folder that it lies in."""
    source = read(Path(path))
    try:
        rig = Rig.model_validate(source.data)
    except ValidationError as error:
        raise _first_of(problems(error, Sources(source), Rig)) from None
    for role in ("drive", "speed"):
        if rig.roles.get(role, "").partition(".")[0] not in rig.instruments:
            raise RoleMissing(
                f"the role {role} names no instrument of this rig",
                value=rig.roles.get(role, "not given"),
                allowed=", ".join(rig.instruments),
                where=source.where(("roles", role)),
                remedy="Name an instrument of the rig",
                topic="rig",
            )
    return rig, Path(path).parent


def is_rig_file(path: Path | str) -> bool:
    """Whether the file at `path` is a rig file rather than a job file."""
    data = read(Path(path)).data
    return "instruments" in data and not any(name in data for name in PARTS)


def _checked(source: Source, folder: Path) -> Job:
    _refuse_parts(source)
    data, parts = dict(source.data), {}
    for name in PARTS:
        named = data.get(name)
        if isinstance(named, str):
            parts[name] = _part(source, name, named, folder)
            data[name] = parts[name].data
    sources = Sources(source, parts)
    try:
        job = Job.model_validate(data)
    except ValidationError as error:
        found = problems(error, sources, Job)
    else:
        found = cross_checks(job, sources)
        if not found:
            return job.found_in(Path(sources.place_of("rig")).parent)
    raise _first_of(found)


def _part(source: Source, name: str, named: str, folder: Path) -> Source:
    where = source.where((name,))
    if not named.strip() or not named.isprintable():
        remedy = f'Write for example {name} = "{name}s/….toml"'
        raise ConfigError(f"no path of a {name} file", value=as_written(named), where=where, remedy=remedy)
    part = read(folder / named, where)
    kind = _kind_of(part)
    if kind not in (None, name):
        raise ConfigError(
            f"this is a {kind} file, and a {name} file is wanted",
            value=str(folder / named),
            where=where,
            remedy=f'Write for example {name} = "{name}s/….toml"',
            topic="job-files",
        )
    return part


def _kind_of(source: Source) -> str | None:
    """What kind of file this is by its telling keys; None where they do not say."""
    found = {kind for mark, kind in _MARKS.items() if mark in source.data}
    return found.pop() if len(found) == 1 else None


def _refuse_parts(source: Source) -> None:
    """A rig, motor or sweep file where a job is wanted is a common slip: say so instead of listing its keys."""
    if any(name in source.data for name in PARTS):
        return
    for mark, name in _MARKS.items():
        if mark in source.data:
            remedy = f"Give a job file, which names this one: {name} = …, beside the other two of {', '.join(PARTS)}"
            raise ConfigError(
                f"this is a {name} file, and a job file is wanted",
                where=Where(source.file, source.line((mark,)), mark),
                remedy=remedy,
                topic="job-files",
            )


def _first_of(found: list[ConfigError]) -> ConfigError:
    """The first error, its remedy followed by how many more there are."""
    first, more = found[0], len(found) - 1
    if more:
        count = "One more problem shows" if more == 1 else f"{more} more problems show"
        dot = "" if first.remedy is None or first.remedy.endswith(("?", ".")) else "."
        first.remedy = f"{first.remedy or ''}{dot} {count} when this is mended".strip()
    return first
