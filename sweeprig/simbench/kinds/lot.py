"""A lot: motors of one type as they differ from unit to unit, drawn from a seeded distribution.

True values only; what a unit then does is its kind's.
"""

from __future__ import annotations

import math
import zlib
from collections.abc import Mapping
from dataclasses import fields, is_dataclass, replace
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np

from sweeprig.errors import SweeprigError

if TYPE_CHECKING:
    from _typeshed import DataclassInstance

Truth = TypeVar("Truth", bound="DataclassInstance")


def lot(truth: Truth, spreads: Mapping[str, float], count: int, seed: int) -> list[Truth]:
    """`count` units; each value named in `spreads` (name → standard deviation in percent of it) is drawn for itself.

    The law is lognormal with the value of `truth` as its mean, so that nothing turns negative: sigma² =
    ln(1 + (spread/100)²). A value of zero stays zero. Every unit and value has its own generator: unit 7 is the same
    in a lot of 10 and of 1,000, and another value's spread changes nothing about this one's.
    Errors: SweeprigError for a name that is no value of `truth`, a spread below 0 or above 100 %, or a count below 0.
    """
    if not is_dataclass(truth):
        raise SweeprigError("a lot is drawn around the true values of one motor", value=type(truth).__name__)
    known = {field.name for field in fields(truth) if isinstance(getattr(truth, field.name), float)}
    for name, percent in spreads.items():
        if name not in known:
            raise SweeprigError("the motor has no such value", value=name, allowed=", ".join(sorted(known)))
        if not 0.0 <= percent <= 100.0:
            raise SweeprigError(f"no spread of {name} from unit to unit", value=f"{percent:g} %", allowed="0 to 100 %")
    if count < 0:
        raise SweeprigError("a lot has a number of units", value=str(count), allowed="0 or more")
    return [replace(truth, **_drawn(truth, spreads, seed, unit)) for unit in range(count)]


def _drawn(truth: DataclassInstance, spreads: Mapping[str, float], seed: int, unit: int) -> dict[str, Any]:
    values = {}
    for name, percent in spreads.items():
        variance = math.log1p((percent / 100.0) ** 2)
        normal = np.random.default_rng([seed, unit, zlib.crc32(name.encode())]).standard_normal()
        values[name] = getattr(truth, name) * math.exp(math.sqrt(variance) * float(normal) - 0.5 * variance)
    return values
