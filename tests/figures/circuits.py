"""Kirchhoff's laws of the power stages for the tests: each half bridge's output from its gates, current and diode law.

An independent reference: nothing of the simulated bench's circuits is used. Integrated by scipy, restarted at each
switching moment and wherever the current passes through zero. With a capacitor across the motor the stage's current is
found from the two voltages at every moment.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.integrate import solve_ivp


@dataclass(frozen=True)
class Circuit:
    """A winding with back-EMF on a stage. Gates are written per half bridge: "high", "low" or "none" conducts.

    load_farad, load_ohms   a capacitor across the motor, and its series resistance
    """

    kind: str
    volts: float = 12.0
    ohm: float = 6.0
    henry: float = 3e-3
    pwm_hz: float = 1000.0
    duty_percent: float = 40.0
    switch_ohms: float = 0.0
    diode_volts: float = 0.5
    diode_ohms: float = 0.0
    supply_ohms: float = 0.0
    dead_s: float = 0.0
    synchronous: bool = False
    fast: bool = False
    load_farad: float = 0.0
    load_ohms: float = 0.0

    def gates(self) -> Iterator[tuple[float, str, str]]:
        """(seconds, first half bridge, second half bridge) of one period; a low-side stage has its switch at "low"."""
        period = 1.0 / self.pwm_hz
        on = period * self.duty_percent / 100.0
        dead = self.dead_s if self.synchronous else 0.0
        on_first, off_first = ("low", "none") if self.kind == "low_side_diode" else ("high", "low")
        away = off_first if self.synchronous else "none"
        other_off = ("high" if self.synchronous else "none") if self.fast else "low"
        other_dead = "none" if self.fast else "low"
        yield dead, "none", other_dead
        yield on - dead, on_first, "low"
        yield dead, "none", other_dead
        yield period - on - dead, away, other_off

    def leg(self, gate: str, leaving: float, rail: float, sign: float) -> tuple[float, float]:
        """(voltage, current taken from the rail) of a half bridge whose output gives `leaving`; sign: its way."""
        if gate == "high":
            return rail - self.switch_ohms * leaving, leaving
        if gate == "low":
            return -self.switch_ohms * leaving, 0.0
        if sign > 0.0:
            return -self.diode_volts - self.diode_ohms * leaving, 0.0
        return rail + self.diode_volts - self.diode_ohms * leaving, leaving

    def motor(self, first: str, second: str, amps: float, sign: float) -> tuple[float, float]:
        """(voltage across the motor, supply current) at a current; the rail sags by the supply's resistance."""
        taken = 0.0
        for _ in range(2):  # the supply's current does not depend on the rail: the second round is exact
            rail = self.volts - self.supply_ohms * taken
            if self.kind == "low_side_diode":
                # the motor hangs on the rail, and its current enters the node, whose upper diode is the freewheel one
                node, returned = self.leg(first, -amps, rail, -sign)
                across, taken = rail - node, amps + returned
            elif self.kind == "half_bridge":
                across, taken = self.leg(first, amps, rail, sign)
            else:
                a, from_a = self.leg(first, amps, rail, sign)
                b, from_b = self.leg(second, -amps, rail, -sign)
                across, taken = a - b, from_a + from_b
        return across, taken


def one_period_loaded(circuit: Circuit, emf: float, amps: float, volts: float, rtol: float = 1e-10) -> dict[str, float]:
    """As `one_period`, with the capacitor: from winding current (A) and its voltage (V). `end_volts` besides.

    Nothing is restarted where a diode begins or ceases to conduct: the stage's current passes through zero smoothly.
    """
    state, peak, low, high = [amps, volts, 0.0, 0.0, 0.0, 0.0], 0.0, amps, amps
    for seconds, first, second in circuit.gates():
        if seconds <= 0.0:
            continue

        def slopes(_: float, y: Any, first: str = first, second: str = second) -> list[float]:
            given, across, taken = _stage(circuit, first, second, y[0], y[1])
            return [(across - emf - circuit.ohm * y[0]) / circuit.henry, (given - y[0]) / circuit.load_farad,
                    y[0], taken, across, y[0] ** 2]  # fmt: skip

        done = solve_ivp(slopes, (0.0, seconds), state, method="DOP853", rtol=rtol, atol=1e-13, dense_output=True)
        assert done.success
        looked = done.sol(np.linspace(0.0, seconds, 2000))  # type: ignore[misc]  # asked for by dense_output
        low, high = min(low, float(looked[0].min())), max(high, float(looked[0].max()))
        peak = max(peak, *(_stage(circuit, first, second, i, v)[2] for i, v in zip(looked[0], looked[1], strict=True)))
        state = list(done.y[:, -1])
    mean = [float(total) * circuit.pwm_hz for total in state[2:]]
    return {"end": state[0], "end_volts": state[1], "amps": mean[0], "supply": mean[1], "volts": mean[2],
            "square": mean[3], "valley": low, "peak": high, "spike": peak}  # fmt: skip


def _stage(circuit: Circuit, first: str, second: str, amps: float, volts: float) -> tuple[float, float, float]:
    """(current the stage gives, voltage across the motor, supply current): the stage's law meets the capacitor's."""
    alone = volts - circuit.load_ohms * amps
    for sign in (1.0, -1.0):
        at_none, at_one = (circuit.motor(first, second, given, sign)[0] for given in (0.0, 1.0))
        given = (at_none - alone) / (circuit.load_ohms - (at_one - at_none))
        if given * sign >= 0.0:
            across, taken = circuit.motor(first, second, given, sign)
            return given, across, taken
    return 0.0, alone, 0.0


def one_period(circuit: Circuit, emf: float, amps: float, rtol: float = 1e-10) -> dict[str, float]:
    """From a current (A) through one period: its end, extremes, means of current, supply current, volts, current²."""
    sums = np.zeros(4)
    low = high = amps
    for seconds, first, second in circuit.gates():
        left = seconds
        while left > 1e-15:
            sign, resting = _way(circuit, first, second, amps, emf)
            if resting:
                sums[2] += emf * left
                break
            done = _stretch(circuit, (first, second), emf, amps, sign, left, rtol)
            left = left - float(done.t[-1]) if done.t_events[0].size else 0.0
            amps = 0.0 if done.t_events[0].size else float(done.y[0, -1])
            sums += done.y[1:, -1]
            low, high = min(low, float(done.y[0].min())), max(high, float(done.y[0].max()))
    mean = [float(total) * circuit.pwm_hz for total in sums]
    return {"end": amps, "amps": mean[0], "supply": mean[1], "volts": mean[2], "square": mean[3],
            "valley": low, "peak": high}  # fmt: skip


def _way(circuit: Circuit, first: str, second: str, amps: float, emf: float) -> tuple[float, bool]:
    """(sign of the current that flows on, whether none can)."""
    if amps != 0.0:
        return float(np.sign(amps)), False
    forward, reverse = (circuit.motor(first, second, 0.0, sign)[0] for sign in (1.0, -1.0))
    return (1.0 if forward > emf else -1.0), forward <= emf <= reverse


def _stretch(
    circuit: Circuit, gates: tuple[str, str], emf: float, amps: float, sign: float, left: float, rtol: float
) -> Any:
    def slopes(_: float, state: Any) -> list[float]:
        across, taken = circuit.motor(*gates, state[0], sign)
        return [(across - emf - circuit.ohm * state[0]) / circuit.henry, state[0], taken, across, state[0] ** 2]

    def zero(_: float, state: Any) -> float:
        return float(state[0]) * sign if abs(state[0]) > 1e-14 or _ > 0.0 else 1.0

    zero.terminal = True  # type: ignore[attr-defined]  # scipy reads attributes of the event function
    zero.direction = -1.0  # type: ignore[attr-defined]  # likewise
    return solve_ivp(slopes, (0.0, left), [amps, 0.0, 0.0, 0.0, 0.0], "DOP853", events=zero, rtol=rtol, atol=1e-14)
