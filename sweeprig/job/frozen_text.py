"""The whole job as one TOML text, and its hash: what a run folder keeps, and what a rerun starts from.

Writes what `load` reads back to an equal Job; no files.
"""

from __future__ import annotations

import hashlib

import tomli_w

from sweeprig.job.models import Job
from sweeprig.job.rig_models import Rig


def document(job: Job) -> str:
    """One TOML text with rig, motor and sweep as tables; `load` gives an equal Job for it."""
    return tomli_w.dumps(_without_empty(job.model_dump(exclude_none=True)))


def rig_document(rig: Rig) -> str:
    """A rig file, as a job file names it."""
    return tomli_w.dumps(_without_empty(rig.model_dump(exclude_none=True)))


def job_hash(text: str) -> str:
    """SHA-256 of a job text, hexadecimal; line ends count as LF: a copy by way of another system is the same."""
    return hashlib.sha256(text.replace("\r\n", "\n").encode()).hexdigest()


def _without_empty(table: dict[str, object]) -> dict[str, object]:
    """Without tables that hold nothing: each of them may be left out, and a person reads this text too."""
    made = {key: _without_empty(value) if isinstance(value, dict) else value for key, value in table.items()}
    return {key: value for key, value in made.items() if value != {}}
