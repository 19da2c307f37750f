"""Is it believed that the rotor stopped, or turns? The tachometer says so; voltage and current say whether it is true.

Pure. For brushed motors: their back-EMF shows in the current, and in the mean voltage where the current has gaps. A
motor's own electronics draw what they like.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from statistics import median

from sweeprig.conduct.answering import next_to_none
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.protection import Commanded
from sweeprig.conduct.sanity import Doubt, Looked
from sweeprig.quantities import Reading, show_quantity

CONTRADICTED = "rotation_contradicted"
Cycle = Mapping[str, Reading]


@dataclass(slots=True)
class Rotation:
    """Keeps the cycles of the present hold, and from the holds before what is read at rest.

    power   of the duty with which the current at rest grows where the rig reads it: 1 in the motor's lead, 2 in the
            supply's or the switch's, in which it flows in the on-time only
    maximum_rpm   from the motor file: what counts as fast
    """

    looked: Looked
    power: int
    maximum_rpm: float
    cycles: list[Cycle] = field(default_factory=list)
    _at_rest: dict[tuple[str | None, float, float | None], dict[float, float]] = field(default_factory=dict)

    def begin(self) -> None:
        """Another setting: what follows belongs to it."""
        self.cycles.clear()

    def take(self, readings: Cycle) -> None:
        self.cycles.append(readings)

    def stopped(self, commanded: Commanded) -> Doubt | None:
        """The tachometer says that the rotor stopped, or never started, at this setting. None: it is believed."""
        if not self.looked.brushed_on_diode or not self.cycles or commanded.duty_percent <= 0.0:
            return None
        if (doubt := self._dead(commanded)) is not None:
            return doubt
        if turning := self._turning():
            # The last one may have the stop in it already
            doubt = self._unchanged(turning[:-1][-4:], self.cycles[-1], commanded)
        elif _long_without_edge(self.cycles[-1], self.looked.age):
            doubt = self._not_as_at_rest(self.cycles[-1], commanded) or self._spun_up(self.cycles)
        if doubt is None:
            self._learn(commanded)
        return doubt

    def at_rest(self, commanded: Commanded) -> str:
        """The tachometer says that the rotor turns fast, at this setting; what says that it stands, "" for nothing.

        Current and voltage together, both read and both known at rest from a duty nearby: on a current without gaps the
        voltage is the same turning or not, but back-EMF takes its part of the current; with gaps it is the other way
        round. So a rotor that turns fast never shows both as at rest. Of a slow one nothing can be told."""
        last = self.cycles[-int(BOUNDS["spun_up_readings"]) :]
        speed, duty = _median(last, self.looked.speed), commanded.duty_percent / 100.0
        fast = BOUNDS["fast_percent"] / 100.0 * duty * self.maximum_rpm
        if not self.looked.brushed_on_diode or len(last) < BOUNDS["spun_up_readings"] or speed is None or speed < fast:
            return ""
        says = []
        for channel, power in ((self.looked.voltage, 1), (self.looked.current, self.power)):
            known, present = self._known(channel, commanded, power, False), _median(last, channel)
            if channel is None or known is None or present is None:
                return ""
            if abs(present - known) > BOUNDS["as_at_rest_percent"] / 100.0 * abs(known):
                return ""
            unit = last[-1][channel].unit
            says.append(f"{channel} {show_quantity(present, unit)}, at rest {show_quantity(known, unit)}")
        return f"{speed:.4g} rpm, but {' and '.join(says)}"

    def _dead(self, commanded: Commanded) -> Doubt | None:
        """Next to no voltage although some is due: nothing drives the rotor, and its stop says nothing."""
        volts, supply = _value(self.cycles[-1], self.looked.voltage), commanded.supply_v
        if volts is None or supply is None or not next_to_none(volts, commanded.duty_percent / 100.0, supply):
            return None
        words = (
            f"{self.looked.voltage} reads {show_quantity(volts, 'V')} at {commanded.duty_percent:.4g} % of {supply:g} V"
        )
        return Doubt("switch_open", f"{words}: the drive does not reach the motor")

    # -- it turned, and then not ---------------------------------------------------------------------------------

    def _unchanged(self, turning: Sequence[Cycle], now: Cycle, commanded: Commanded) -> Doubt | None:
        """Neither voltage nor current went where a rotor at rest takes them; or the current vanished."""
        says, told = [], False
        for channel, at_rest in ((self.looked.voltage, self._volts_at_rest), (self.looked.current, self._amps_at_rest)):
            was, present = _median(turning, channel), _value(now, channel)
            if channel is None or was is None or present is None:
                continue
            if channel == self.looked.current and self._vanished(turning, now):
                words = f"{channel} fell from {show_quantity(was, 'A')} to {show_quantity(present, 'A')} as it stopped"
                return Doubt("switch_open", f"{words}: the drive does not reach the motor")
            rest = at_rest(commanded, was)
            if rest is None or abs(rest - was) < BOUNDS["contrast_percent"] / 100.0 * abs(was):
                continue
            told = True
            if (present - was) / (rest - was) >= BOUNDS["went_percent"] / 100.0:
                return None
            unit = now[channel].unit
            says.append(f"{channel} stays at {show_quantity(present, unit)}, at rest {show_quantity(rest, unit)}")
        if not told:
            return None
        return Doubt(
            CONTRADICTED, f"no tachometer edges, but {' and '.join(says)}: the rotor turns; see the tachometer"
        )

    def _volts_at_rest(self, commanded: Commanded, was: float) -> float | None:
        """As seen at rest at a duty nearby; else D·V_s at most, where back-EMF in the gaps of the current shows."""
        known = self._known(self.looked.voltage, commanded, 1, False)
        due = commanded.duty_percent / 100.0 * (commanded.supply_v or 0.0)
        return due if known is None and was > BOUNDS["gaps_percent"] / 100.0 * due > 0.0 else known

    def _amps_at_rest(self, commanded: Commanded, was: float) -> float | None:
        """As seen at rest at a duty nearby or below. Where nothing is known yet, a rotor that went fast, on a current
        without gaps, would take more by what its back-EMF keeps away."""
        known = self._known(self.looked.current, commanded, self.power, True)
        if known is not None:
            return known
        turning = self._turning()
        speed, volts = _median(turning, self.looked.speed), _median(turning, self.looked.voltage)
        part = BOUNDS["fast_percent"] / 100.0
        duty = commanded.duty_percent / 100.0
        gaps = volts is None or commanded.supply_v is None or volts > duty * commanded.supply_v
        if gaps or speed is None or speed < part * duty * self.maximum_rpm:
            return None
        return was / (1.0 - part)

    def _known(self, channel: str | None, commanded: Commanded, power: int, below: bool) -> float | None:
        """The value at rest, from the nearest duty at which it was read, grown with a power of the duty. `below`: also
        from further down, whence a diode's drop makes it too small at most."""
        table = self._at_rest.get((channel, commanded.pwm_hz, commanded.supply_v), {})
        duty = commanded.duty_percent
        at = min(table, key=lambda each: max(each / duty, duty / each), default=None)
        if at is None or (max(at / duty, duty / at) > BOUNDS["near_duty_ratio"] and not (below and at < duty)):
            return None
        return table[at] * (duty / at) ** power

    def _turning(self) -> list[Cycle]:
        """Cycles of this hold before the last one that had a speed."""
        return [cycle for cycle in self.cycles[:-1] if self._speed(cycle) is not None]

    def _vanished(self, turning: Sequence[Cycle], now: Cycle) -> bool:
        was, present = _median(turning, self.looked.current), _value(now, self.looked.current)
        if was is None or present is None or self.looked.current is None:
            return False
        return present < BOUNDS["vanished_percent"] / 100.0 * was - 3.0 * now[self.looked.current].u

    # -- no edge was seen in this hold ---------------------------------------------------------------------------

    def _not_as_at_rest(self, now: Cycle, commanded: Commanded) -> Doubt | None:
        """Less current, or more voltage, than this motor is known to show at rest."""
        amps, volts = self.looked.current, self.looked.voltage
        known, reading = self._known(amps, commanded, self.power, True), now.get(amps or "")
        if known is not None and reading is not None and reading.value is not None:
            less = known - reading.value
            if less > BOUNDS["contrast_percent"] / 100.0 * known and less > 10.0 * reading.u:
                return self._seen_turning(reading, known)
        known, reading = self._known(volts, commanded, 1, False), now.get(volts or "")
        if known is not None and reading is not None and reading.value is not None:
            more = reading.value - known
            if more > BOUNDS["contrast_percent"] / 100.0 * known and more > BOUNDS["voltage_slack_volts"]:
                return self._seen_turning(reading, known)
        return None

    def _seen_turning(self, reading: Reading, at_rest: float) -> Doubt:
        shown, rest = show_quantity(reading.value or 0.0, reading.unit), show_quantity(at_rest, reading.unit)
        words = f"{reading.channel} reads {shown}, at rest {rest}"
        return Doubt(CONTRADICTED, f"no tachometer edges, but {words}: the rotor turns; see the tachometer")

    def _spun_up(self, cycles: Sequence[Cycle]) -> Doubt | None:
        """A rotor at rest takes the same current all the time; one that starts unseen takes ever less."""
        channel = self.looked.current
        values = [cycle[channel] for cycle in cycles if channel is not None and channel in cycle]
        if channel is None or len(values) < BOUNDS["spun_up_readings"]:
            return None
        first, last = values[0], values[-1]
        if first.value is None or last.value is None or first.value <= 0.0:
            return None
        fell = first.value - last.value
        if fell < (1.0 - BOUNDS["spun_up_percent"] / 100.0) * first.value or fell < 5.0 * (first.u + last.u):
            return None
        words = f"{channel} fell from {show_quantity(first.value, 'A')} to {show_quantity(last.value, 'A')}"
        return Doubt(CONTRADICTED, f"no tachometer edges, but {words}: the rotor started; see the tachometer")

    def _learn(self, commanded: Commanded) -> None:
        """What is read at rest, from cycles that had no edge in them."""
        at_rest = [cycle for cycle in self.cycles if _long_without_edge(cycle, self.looked.age)]
        for channel in (self.looked.voltage, self.looked.current):
            value = _median(at_rest, channel)  # one reading alone may be anything
            if value is not None and len(at_rest) >= BOUNDS["spun_up_readings"]:
                place = (channel, commanded.pwm_hz, commanded.supply_v)
                self._at_rest.setdefault(place, {})[commanded.duty_percent] = value

    def _speed(self, cycle: Cycle) -> float | None:
        return _value(cycle, self.looked.speed)


def _long_without_edge(cycle: Cycle, age: str) -> bool:
    """No edge since before the cycle began: nothing in it is of a rotor that still runs down."""
    seconds = _value(cycle, age)
    return seconds is not None and seconds >= BOUNDS["trial_window_s"] + BOUNDS["cycle_window_s"]


def _value(cycle: Cycle, channel: str | None) -> float | None:
    reading = cycle.get(channel or "")
    return None if reading is None else reading.value


def _median(cycles: Sequence[Cycle], channel: str | None) -> float | None:
    values = [value for cycle in cycles if (value := _value(cycle, channel)) is not None]
    return median(values) if values else None
