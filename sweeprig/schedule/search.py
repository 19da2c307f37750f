"""Which trial next: the duty and the length with the best expected fall in variance per expected second. Pure numbers.

Sums of the trials at one condition in, a choice out; which holds they came from is not known here. The belief is made
in `posterior`, the look ahead in `one_step`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from sweeprig.laws import Floats, Law
from sweeprig.schedule.keys import Key
from sweeprig.schedule.one_step import expected, variance
from sweeprig.schedule.posterior import Cells, Prior, cells

SURVIVAL, BINARY = "survival", "binary"
LEVELS = (0.005, 0.02, 0.04, 0.08, 0.14, 0.22, 0.32, 0.43, 0.55, 0.67, 0.79, 0.9, 0.97)
"""Duties are tried where a whole trial is expected to fail with these chances. Lower duties would pay if the law were
beyond doubt: steepness from afar. But there the rotor stops while it still comes down, which says little of a hazard,
and where the other law of the stall was the true one, the errors of `sustain_99` doubled (own simulation)."""
TAIL = (0.02, 0.2)
"""Definitions: findings in the tail are supported by trials with such chances to fail."""
TAIL_FROM = 0.99
AT_THE_END = 3
"""Whole trials alike at the end of the duties allowed after which a motor is said never to stop, or never to start."""
_SPOTS, _REACH = 27, 2.8
_DIGITS = 9
_LEAST_HAZARD = 1e-9


@dataclass(frozen=True, slots=True)
class Question:
    """What is asked of the trials of one kind (stall or start) at one condition.

    prior            where the place can be at all, and the spread before the trials
    low, high, step  duties that may be tried, percent
    parts            lengths of a trial to choose from, in parts of the whole trial, shortest first
    whole_s          seconds of a whole trial
    before_s         seconds before the exposure begins: relaunch and settling, or coast and rest
    after_failure_s  seconds that a failure costs beyond that: cooling down
    coming_down_s    a stop within it is only known to have happened by then
    wanted           (chance to succeed, standard error asked of its duty, percent)
    likelihood       SURVIVAL: the moment of a failure is known; BINARY: only whether it failed
    unit             what one whole trial counts in the sums: its seconds, or 1
    end_within       as long as one result was never seen, trials so near to the end of the duties, %, are followed by
                     trials at the end itself; 0: they are not
    ends_early       a failure ends the exposure, so that it costs less time; None: where its moment is known
    """

    law: Law
    prior: Prior
    low: float
    high: float
    step: float
    parts: tuple[float, ...]
    whole_s: float
    before_s: float
    after_failure_s: float
    coming_down_s: float
    wanted: tuple[tuple[float, float], ...]
    likelihood: str = SURVIVAL
    unit: float = 1.0
    ends_early: bool | None = None
    end_within: float = 0.0


@dataclass(frozen=True, slots=True)
class Choice:
    """The trial to make next, and what is known so far.

    gain_per_s   expected fall of the wanted variances, in squares of the asked standard errors, per expected second
    u            chance to succeed → standard error of its duty now, percent
    reached      all wanted are known as asked, and a tail that is wanted has a trial in it; or one result never came,
                 in AT_THE_END trials at the end of the duties neither, and there is but a bound to find
    failing      chance that the trial fails; seconds: that it is expected to take, all counted
    """

    duty_percent: float
    part: float
    gain_per_s: float
    u: dict[float, float]
    reached: bool
    failing: float
    seconds: float


@lru_cache(maxsize=512)
def best(question: Question, key: Key) -> Choice:
    """The trial that tells most per second given the sums `key` (`keys.key_of`). Total and deterministic."""
    believed = cells(question.law, key, question.unit, question.prior, question.coming_down_s / question.whole_s)
    values = np.array([np.clip(believed.duty(p), question.low, question.high) for p, _ in question.wanted])
    now = _variances(believed.weight, values)
    asked = np.array([error**2 for _, error in question.wanted])
    sharp = bool(np.all(now <= asked))
    edge = _edge(question, key)
    supported = edge is None and _tail_tried(question, key, believed)
    duties = _duties(question, believed, tail_only=sharp and not supported)
    end = _end_in_sight(question, key)
    if (sharp and edge is not None) or end is not None:  # one result was never seen: it is asked for where it would be
        duties = np.array([edge if end is None else end])
    parts = np.array(question.parts)
    chance, makes, failing, seconds = _outcomes(question, believed, duties, parts)
    after = expected(believed.weight, chance, makes, variance(values))
    counts = np.where(now > asked, 1.0, 0.0) if not sharp else np.ones(now.size)
    fall = ((now - after) / asked) @ counts
    gain = np.round(fall / seconds, _DIGITS) + 0.0
    index = int(np.argmax(gain))
    return Choice(
        duty_percent=float(duties[index // parts.size]),
        part=float(parts[index % parts.size]),
        gain_per_s=float(gain[index]),
        u={p: math.sqrt(v) for (p, _), v in zip(question.wanted, now.tolist(), strict=True)},
        reached=(sharp and supported) or (end is not None and _tried_at(question, key, end) >= AT_THE_END),
        failing=float(failing[index]),
        seconds=float(seconds[index]),
    )


def _variances(weight: Floats, values: Floats) -> Floats:
    mean = values @ weight
    return np.asarray(((values - mean[:, None]) ** 2) @ weight)


def _edge(question: Question, key: Key) -> float | None:
    """The end of the duties allowed that must still be tried before the search may end; None: both results have been
    seen, or the one that has not does not come at that end either."""
    exposures, events = key
    turned = [duty for duty, survived in exposures if survived > 0.0]
    low, high = _grid_ends(question)
    if turned and events:
        return None
    if turned:
        return None if min(turned) <= low * question.step + 1e-9 else low * question.step
    return (
        None if events and max(duty for duty, _, _ in events) >= high * question.step - 1e-9 else high * question.step
    )


def _end_in_sight(question: Question, key: Key) -> float | None:
    """The end of the duties allowed where the result that was never seen would be, once trials came within `end_within`
    of it: there at once, since a motor that never stops would be followed by ever smaller steps."""
    exposures, events = key
    turned = [duty for duty, survived in exposures if survived > 0.0]
    if question.end_within == 0.0 or (turned and events) or not (turned or events):
        return None
    low, high = (step * question.step for step in _grid_ends(question))
    nearest, end = (min(turned), low) if turned else (max(duty for duty, _, _ in events), high)
    return round(end, _DIGITS) if abs(nearest - end) <= question.end_within else None


def _tried_at(question: Question, key: Key, duty: float) -> float:
    """How many whole trials were survived, or failed, at a duty."""
    exposures, events = key
    survived = sum(seconds for at, seconds in exposures if abs(at - duty) < 1e-9) / question.unit
    return survived + sum(count for at, _, count in events if abs(at - duty) < 1e-9)


def _grid_ends(question: Question) -> tuple[int, int]:
    """Lowest and highest multiple of the step within the duties allowed."""
    low, high = math.ceil(question.low / question.step - 1e-9), math.floor(question.high / question.step + 1e-9)
    return low, max(low, high)


def _tail_tried(question: Question, key: Key, believed: Cells) -> bool:
    """Whether a trial was made in the tail, where one is wanted and the step of duty has a place there."""
    exposures, events = key
    if max(p for p, _ in question.wanted) < TAIL_FROM or not events:
        return True
    tried = np.array([duty for duty, _ in exposures])
    return bool(np.any(_in_tail(believed, tried))) or not np.any(
        _in_tail(believed, _duties(question, believed, tail_only=True))
    )


def _in_tail(believed: Cells, duties: Floats) -> NDArray[np.bool_]:
    failing = believed.failing(duties)
    return np.asarray((failing >= TAIL[0]) & (failing <= TAIL[1]))


def _duties(question: Question, believed: Cells, *, tail_only: bool) -> Floats:
    """Duties on the grid, lowest first, where a whole trial is expected to fail with the chances of LEVELS."""
    weight = believed.weight
    centre = float(weight @ believed.median)
    scatter = math.sqrt(float(weight @ (believed.median - centre) ** 2))
    scale = scatter + math.exp(float(weight @ np.log(believed.spread)))
    spots = centre + scale * np.sinh(np.linspace(-_REACH, _REACH, _SPOTS))
    failing = believed.failing(spots)
    levels = np.array([level for level in LEVELS if not tail_only or TAIL[0] <= level <= TAIL[1]])
    places = np.interp(levels, failing[::-1], spots[::-1])
    steps = np.clip(np.round(places / question.step), *_grid_ends(question))
    return np.unique(np.round(steps * question.step, _DIGITS))


def _outcomes(
    question: Question, believed: Cells, duties: Floats, parts: Floats
) -> tuple[Floats, Floats, Floats, Floats]:
    """(chance (rows, cells), makes (candidates, rows), chance to fail, expected seconds); candidates: each duty with
    each length. Rows of a duty: got through to each moment, then failed in each interval between the moments."""
    hazard = believed.hazard(duties)
    soonest = question.coming_down_s / question.whole_s
    timed = question.likelihood == SURVIVAL
    moments = np.unique(np.append(parts, soonest if timed and 0.0 < soonest < parts[-1] else parts[0]))
    through = np.exp(-hazard[:, None, :] * moments[:, None])
    failed = np.concatenate([1.0 - through[:, :1], through[:, :-1] - through[:, 1:]], axis=1)
    ends = np.searchsorted(moments, parts)
    inner = np.arange(moments.size) <= ends[:, None]
    if timed:
        rows = np.concatenate([through, failed], axis=1)
        one = np.concatenate([np.arange(moments.size) == ends[:, None], inner], axis=1).astype(float)
    else:
        rows = np.concatenate([through[:, ends], 1.0 - through[:, ends]], axis=1)
        one = np.tile(np.eye(parts.size), 2)
    makes = np.kron(np.eye(duties.size), one)
    rate = np.maximum(hazard, _LEAST_HAZARD)[:, None, :]
    exposed = -np.expm1(-rate * parts[:, None]) / rate
    failing = (1.0 - through[:, ends]) @ believed.weight
    early = timed if question.ends_early is None else question.ends_early
    lasts = (exposed @ believed.weight if early else np.broadcast_to(parts, failing.shape)) * question.whole_s
    seconds = question.before_s + lasts + failing * question.after_failure_s
    return rows.reshape(-1, hazard.shape[1]), makes, failing.ravel(), seconds.ravel()
