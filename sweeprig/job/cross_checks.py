"""What no single value can tell: whether rig, motor and sweep fit each other, and whether the wiring is allowed.

Pure: a Job and the places of its values in, errors out. The rig's own wiring is wiring_checks.py. No adapter is
imported: whether one exists, and has the channels that are named, is found when the rig opens.
"""

from __future__ import annotations

from collections.abc import Iterator

from sweeprig.errors import ConfigError, RoleMissing
from sweeprig.job.amounts import shown
from sweeprig.job.freeze import curve_low
from sweeprig.job.kind_checks import kind_checks
from sweeprig.job.models import Job
from sweeprig.job.motor_models import FINDING_UNITS
from sweeprig.job.problems import Sources, misfit
from sweeprig.job.pwm_checks import pwm_checks
from sweeprig.job.search_checks import search_checks
from sweeprig.job.simulated_models import BrushedValues, SimulatedElectronic
from sweeprig.job.toml_source import KeyPath
from sweeprig.job.wiring_checks import wiring_checks

TIME_CONSTANTS = 5.0
"""A first-order change is done to 0.7 % after so many time constants (exp(−5) = 0.0067)."""

_SLACK = 1.0 + 1e-9  # 5 × 0.6 s must not fail for its last bit


def cross_checks(job: Job, sources: Sources) -> list[ConfigError]:
    """All that does not fit, the rig's wiring first; empty when the job may be run."""
    own = (_roles, _voltages, _duties, _curve, _times, _limits, _findings, _deadline)
    checks = (wiring_checks, *own, search_checks, pwm_checks, kind_checks)
    return [error for check in checks for error in check(job, sources)]


def _roles(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """`drive` and `speed` always; `supply` where the sweep wants several voltages."""
    needs = {
        "drive": ("every hold sets a duty", 'drive = "board"'),
        "speed": ("turning and stopped are told apart by it", 'speed = "board.speed"'),
    }
    if job.rig.drive_kind == "control_input":
        needs["supply"] = ("an open control input means full speed, so off means supply off", 'supply = "supply"')
    if len(job.sweep.supply) > 1:
        count = len(job.sweep.supply)
        needs["supply"] = (f"the sweep asks for {count} supply voltages, which something must set", 'supply = "supply"')
    for role, (reason, example) in needs.items():
        several = role == "supply" and len(job.sweep.supply) > 1
        if role not in job.rig.roles:
            yield RoleMissing(
                f"the rig offers no {role}: {reason}",
                value=f"roles are {', '.join(job.rig.roles) or 'none'}",
                allowed=f"a rig with the role {role}",
                where=sources.where(("rig", "roles", role)),
                remedy=f"Add for example {example} to [roles]"
                + (f", or ask for one voltage only ({sources.where(('sweep', 'supply'))})" if several else ""),
                topic="rig",
            )


def _voltages(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """No supply voltage above what the motor bears or above the rig's own trip; nominal not above maximum."""
    bounds: tuple[tuple[float, KeyPath, str], ...] = (
        (job.motor.maximum_voltage, ("motor", "maximum_voltage"), "the motor's maximum voltage"),
        (
            job.rig.limits.motor_voltage,
            ("rig", "limits", "motor_voltage"),
            "the rig's limit, at which the drive goes off",
        ),
    )
    for position, volts in enumerate(job.sweep.supply):
        for bound, place, name in bounds:
            if volts > bound:
                path: KeyPath = ("sweep", "supply", position)
                yield misfit(
                    sources, path, f"this supply voltage is above {name} ({sources.where(place)})",
                    f"up to {shown(bound, 'V')}", "Lower it; raise the limit only if the data sheet does",
                )  # fmt: skip
                break
    if job.motor.nominal_voltage > job.motor.maximum_voltage:
        yield misfit(
            sources, ("motor", "nominal_voltage"),
            f"the nominal voltage is above the maximum ({sources.where(('motor', 'maximum_voltage'))})",
            f"up to {shown(job.motor.maximum_voltage, 'V')}", "Look both up in the data sheet",
        )  # fmt: skip


def _duties(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """low < high; high within what motor and rig allow; every duty of the sweep in between."""
    duty, path = job.sweep.duty, ("sweep", "duty", "high")
    high = shown(duty.high, "%")
    if duty.low >= duty.high:
        yield misfit(
            sources, ("sweep", "duty", "low"), "the lowest duty is not below the highest", f"below {high}",
            "Exchange the two",
        )  # fmt: skip
        return
    bounds: tuple[tuple[float | None, KeyPath], ...] = (
        (job.motor.maximum_duty, ("motor", "maximum_duty")),
        (job.rig.limits.highest_duty, ("rig", "limits", "highest_duty")),
    )
    for bound, place in bounds:
        if bound is not None and duty.high > bound:
            what = f"the highest duty, {high}, is above what {place[0]} allows ({sources.where(place)})"
            yield misfit(sources, path, what, f"up to {shown(bound, '%')}", "Lower the sweep's highest duty")
    inside: list[tuple[KeyPath, float | None]] = [
        (("sweep", "run_in", "duty"), job.sweep.run_in.duty if job.sweep.run_in else None),
        (("sweep", "curve", "lowest"), job.sweep.curve.lowest if job.sweep.curve else None),
    ]
    listed = (job.sweep.curve.duties if job.sweep.curve else None) or ()
    inside += [(("sweep", "curve", "duties", position), each) for position, each in enumerate(listed)]
    for place, value in inside:
        if value is not None and not duty.low <= value <= duty.high:
            allowed = f"{shown(duty.low, '%')} to {high}"
            yield misfit(
                sources, place, "this duty lies outside the sweep's duty range", allowed, "Widen [duty] or move it"
            )


def _curve(job: Job, sources: Sources) -> Iterator[ConfigError]:
    curve = job.sweep.curve
    if curve is None:
        return
    if (curve.points is None) == (curve.duties is None):
        both = "points and duties are both given" if curve.points else "neither points nor duties are given"
        yield misfit(
            sources, ("sweep", "curve", "points"), both, "either points or duties", "Write for example points = 12"
        )
    if curve.lowest is not None and curve.duties is not None:
        yield misfit(
            sources, ("sweep", "curve", "lowest"), "a list of duties already says the lowest",
            "lowest with points only", "Remove lowest",
        )  # fmt: skip
    low = curve_low(job.sweep)
    if curve.points is not None and low >= job.sweep.duty.high:
        yield misfit(
            sources, ("sweep", "curve", "lowest"), "the curve would begin below its own low end",
            f"below {shown(job.sweep.duty.high, '%')}", "Lower it", default=shown(low, "%"),
        )  # fmt: skip
    if curve.least > curve.most:
        yield misfit(
            sources, ("sweep", "curve", "least"), "the shortest wait is longer than the longest",
            f"up to {shown(curve.most, 's')} (most)", "Exchange least and most",
        )  # fmt: skip


def _times(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """Every time in which the speed must arrive: at least five time constants; a start also shorter than the lock."""
    sweep, constant = job.sweep, job.motor.longest_time_constant
    times: list[tuple[KeyPath, float]] = []  # where it stands, what holds
    if sweep.curve is not None:
        times.append((("sweep", "curve", "most"), sweep.curve.most))
    if sweep.stall is not None:
        times += [(("sweep", "stall", "hold_time"), sweep.stall.hold_time)]
        times += [(("sweep", "stall", "relaunch_time"), sweep.stall.relaunch_time)]
    if sweep.start is not None:
        times.append((("sweep", "start", "start_time"), sweep.start.start_time))
    needed = TIME_CONSTANTS * constant
    for path, seconds in times:
        if seconds * _SLACK < needed:
            place = sources.where(("motor", "longest_time_constant"))
            figure = f"{TIME_CONSTANTS:g} × {shown(constant, 's')} = {shown(needed, 's')}"
            yield misfit(
                sources, path, f"shorter than five of the motor's longest time constants, {figure} ({place})",
                f"{shown(needed, 's')} or more", "Lengthen it: the speed has not arrived before",
                default=shown(seconds, "s"),
            )  # fmt: skip
    if sweep.start is not None:
        yield from _start_time(job, sweep.start.start_time, sources)


def _start_time(job: Job, start_time: float, sources: Sources) -> Iterator[ConfigError]:
    path: KeyPath = ("sweep", "start", "start_time")
    longest, locked = job.motor.longest_restart_time, job.limits().locked_rotor_time
    if start_time >= locked:
        owner: KeyPath = ("motor", "locked_rotor_time")
        if job.rig.limits.locked_rotor_time <= job.motor.locked_rotor_time:
            owner = ("rig", "limits", "locked_rotor_time")
        yield misfit(
            sources, path, f"a motor that does not start stands locked for as long as it may ({sources.where(owner)})",
            f"below {shown(locked, 's')}", "Shorten it, or protection ends every trial that fails",
            topic="safety",
        )  # fmt: skip
    if longest is not None and start_time < longest:
        place = sources.where(("motor", "longest_restart_time"))
        yield misfit(
            sources, path, f"shorter than the pause after which the motor tries again by itself ({place})",
            f"{shown(longest, 's')} or more", "Lengthen it: a start that only comes later would be missed",
        )  # fmt: skip


def _limits(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """Ages below the locked-rotor time; the slowest speed and the simulated motor's friction make sense."""
    locked = job.limits().locked_rotor_time
    for role, age in job.rig.limits.longest_age.by_role().items():
        if age >= locked:
            yield misfit(
                sources, ("rig", "limits", "longest_age", role),
                "a reading may grow older than the rotor may stand locked", f"below {shown(locked, 's')}",
                "Shorten it", topic="safety",
            )  # fmt: skip
    if job.sweep.lowest_speed >= job.motor.maximum_speed:
        yield misfit(
            sources, ("sweep", "lowest_speed"),
            f"not below the motor's maximum speed ({sources.where(('motor', 'maximum_speed'))})",
            f"below {shown(job.motor.maximum_speed, 'rpm')}",
            "State the slowest speed that still counts as turning",
        )  # fmt: skip
    true = job.motor.simulated
    rough = true if isinstance(true, BrushedValues | SimulatedElectronic) else None
    if rough is not None and rough.breakaway_friction_nm < rough.running_friction_nm:
        yield misfit(
            sources, ("motor", "simulated", "breakaway_friction_nm"),
            "a rotor sticks at least as hard at rest as turning",
            f"{rough.running_friction_nm:g} or more (running_friction_nm)", "Raise it",
        )  # fmt: skip


def _findings(job: Job, sources: Sources) -> Iterator[ConfigError]:
    """Limits on findings: in the finding's unit, stated, and such that something can meet them."""
    for finding, limit in job.motor.limits.items():
        path, unit = ("motor", "limits", finding), FINDING_UNITS[finding]
        bounds = {"at_least": limit.at_least, "at_most": limit.at_most}
        stated = {key: bound for key, bound in bounds.items() if bound is not None}
        if not stated:
            yield misfit(
                sources, path, "the limit says nothing", "at_least, at_most or both", "State one, or remove it"
            )
        for key, bound in stated.items():
            if bound.unit != unit:
                wanted = "a bare number" if unit == "1" else f"a value in {unit}"
                found = "a bare number" if bound.unit == "1" else f"in {bound.unit}"
                what = f"the limit on {finding} is {wanted}, and this is {found}"
                yield misfit(sources, (*path, key), what, wanted, "Correct the unit")
        if limit.at_least is not None and limit.at_most is not None and limit.at_least > limit.at_most:
            yield misfit(sources, path, f"no {finding} can meet this", "at_least not above at_most", "Exchange the two")


def _deadline(job: Job, sources: Sources) -> Iterator[ConfigError]:
    deadline = job.sweep.deadline
    if deadline is not None and (deadline.until is None) == (deadline.hours is None):
        count = "both are given" if deadline.until else "neither is given"
        yield misfit(
            sources, ("sweep", "deadline"), f"a deadline is either until or hours, and {count}",
            "either until or hours", "Write for example hours = 9",
        )  # fmt: skip
