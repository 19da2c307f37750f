"""What a rig and a sweep give and lack, in words. Pure."""

from __future__ import annotations

from sweeprig.plan import Plan

_NEEDS: dict[str, tuple[str, ...]] = {
    "speed curve, top speed, usable range": ("speed",),
    "stall duty, sustain_99, stall speed": ("speed",),
    "start duty, start_99": ("speed",),
    "kick pulse": ("speed",),
    "long-run duty": ("speed",),
    "drift over the night": ("speed",),
    "mean motor voltage and stall voltage": ("motor_voltage",),
    "current, and protection by current": ("current",),
    "duty as measured": ("duty",),
    "PWM frequency as measured": ("pwm_frequency",),
}
_TABLES = {
    "speed curve, top speed, usable range": "curve",
    "stall duty, sustain_99, stall speed": "stall",
    "start duty, start_99": "start",
    "kick pulse": "kick",
    "drift over the night": "reference",
}
_INSTEAD = {
    "duty as measured": "; the commanded duty is taken, and marked",
    "PWM frequency as measured": "; the commanded frequency is taken",
}


def what_can_be_found(plan: Plan) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """(what this sweep finds with this rig, what it does not, each with the reason)."""
    wanted, missing = dict(_NEEDS), []
    for what, table in _TABLES.items():
        if getattr(plan, table) is None:
            del wanted[what]
            missing.append(f"{what}: the sweep has no [{table}] table")
    can = tuple(what for what, roles in wanted.items() if all(role in plan.roles for role in roles))
    for what, roles in wanted.items():
        lacking = [role for role in roles if role not in plan.roles]
        if lacking:
            shown = ", ".join(role.replace("_", " ") for role in lacking)
            missing.append(f"{what}: no instrument of the rig has the role {shown}{_INSTEAD.get(what, '')}")
    return can, tuple(missing)
