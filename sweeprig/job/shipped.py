"""Where the configs that come with sweeprig lie: inside the installed package, or beside it in a checkout.

Finds files; reads none.
"""

from __future__ import annotations

import difflib
from importlib.resources import files
from pathlib import Path

from sweeprig.errors import ConfigError


def shipped(name: str) -> Path:
    """The path of a shipped config: a job, "demo" or "demo.toml", or a part, "rigs/shelter-bench".

    ConfigError with the names there are when none fits.
    """
    folder = _folder()
    wanted = name if name.endswith(".toml") else f"{name}.toml"
    path = folder / wanted
    inside = path.resolve().is_relative_to(folder.resolve())
    if inside and path.is_file():
        return path
    near = difflib.get_close_matches(wanted.removesuffix(".toml"), shipped_names(), 1, 0.5)
    remedy = f'Did you mean "{near[0]}"?' if near else "A file of your own is given by its path"
    raise ConfigError(
        "no job of that name is shipped",
        value=name,
        allowed=", ".join(shipped_names()),
        remedy=remedy,
        topic="job-files",
    )


def shipped_names() -> tuple[str, ...]:
    """Names of the shipped jobs, without ".toml", in order."""
    return tuple(sorted(path.stem for path in _folder().glob("*.toml")))


def _folder() -> Path:
    package = Path(str(files("sweeprig")))
    for folder in (package / "configs", package.parent / "configs"):
        if folder.is_dir():
            return folder
    raise ConfigError(
        "the shipped configs are missing", value=str(package / "configs"), remedy="Install sweeprig again"
    )
