"""The power stages as netlists for ngspice (Debian package `ngspice`), and its answers: an independent circuit solver.

Same switch resistance and the same straight diode law as in the simulated bench; steps of 1/2,500 period or less.
"""

from __future__ import annotations

import re
import shutil
import subprocess
import tempfile
from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from tests.figures.circuits import Circuit

STEPS = 2500
"""Steps a period, at least; ngspice takes shorter ones at edges."""
EDGE_PARTS = 1e5
"""A gate edge lasts this part of the period: its own error is far below 0.1 %."""


def found() -> str | None:
    """Where ngspice is; None where it is missing."""
    return shutil.which("ngspice")


def solve(circuit: Circuit, emf: float, near_amps: float, near_volts: float = 0.0) -> dict[str, float]:
    """Means over the last period of motor current, supply current and motor voltage; valley and peak current.

    near_amps   the current to begin with, near_volts a load capacitor's voltage; eight time constants of the winding,
                and of the capacitor on it, later nothing is left of them
    """
    period = 1.0 / circuit.pwm_hz
    tau = circuit.henry / circuit.ohm + circuit.load_farad * circuit.ohm
    periods = 3 + int(8.0 * tau / period)
    text = netlist(circuit, emf, near_amps, periods, near_volts)
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "stage.cir"
        path.write_text(text, encoding="ascii")
        command = [found() or "ngspice", "-b", str(path)]
        done = subprocess.run(command, capture_output=True, text=True, check=False, timeout=100)
    answers = re.findall(r"^(\w+)\s*=\s*([-+0-9.e]+)", done.stdout, re.M)
    values = {name: float(value) for name, value in answers}
    missing = {"amps", "supply", "volts", "valley", "peak"} - set(values)
    if missing:
        raise RuntimeError(f"ngspice gave no {', '.join(sorted(missing))}: {done.stderr[-300:]}")
    return values


def netlist(circuit: Circuit, emf: float, near_amps: float, periods: int, near_volts: float = 0.0) -> str:
    """The stage as text: `plus` the rail behind the supply's resistance, `a` and `b` the ends of the motor."""
    period = 1.0 / circuit.pwm_hz
    begin, end = (periods - 1) * period, periods * period
    low_side = circuit.kind == "low_side_diode"
    lines = [
        "power stage",
        f"vs rail 0 {circuit.volts}",
        f"rs rail plus {max(circuit.supply_ohms, 1e-6)}",
        f"rw a m1 {circuit.ohm}",
        f"lw m1 m2 {circuit.henry} ic={near_amps!r}",
        f"ve m2 b {emf}",
        "bm across 0 v = v(a) - v(b)",
        f".model closed sw(vt=0.5 vh=0 ron={max(circuit.switch_ohms, 1e-6)} roff=1e8)",
    ]
    if circuit.load_farad > 0.0:
        lines += [f"rc a mc {circuit.load_ohms}", f"cl mc b {circuit.load_farad} ic={near_volts!r}"]
    if low_side:
        lines += ["vp plus a 0", *half_bridge(circuit, "b", 0)]
    else:
        lines += half_bridge(circuit, "a", 0)
        lines += half_bridge(circuit, "b", 1) if circuit.kind == "h_bridge" else ["vb b 0 0"]
    measured = {
        "amps": "avg i(lw)", "supply": "avg i(vs)", "volts": "avg v(across)", "valley": "min i(lw)",
        "peak": "max i(lw)",
    }  # fmt: skip
    lines += [f".meas tran {name} {what} from={begin!r} to={end!r}" for name, what in measured.items()]
    lines += [
        f".tran {period / STEPS!r} {end!r} {begin!r} {period / STEPS!r} uic",
        ".options reltol=1e-6 trtol=1",
        ".end",
    ]
    return "\n".join(lines) + "\n"


def half_bridge(circuit: Circuit, node: str, which: int) -> list[str]:
    """Two switches with gates, each with its diode, at a node; a low-side stage has only the lower switch."""
    rd, vf = max(circuit.diode_ohms, 1e-3), circuit.diode_volts
    return [
        f"bu{node} {node} plus i = (v({node},plus)-{vf}) > 0 ? (v({node},plus)-{vf})/{rd} : 0",
        f"bl{node} 0 {node} i = (-v({node})-{vf}) > 0 ? (-v({node})-{vf})/{rd} : 0",
        f"su{node} plus {node} gu{node} 0 closed",
        f"sl{node} {node} 0 gl{node} 0 closed",
        *gate(circuit, f"gu{node}", "high", which),
        *gate(circuit, f"gl{node}", "low", which),
    ]


def gate(circuit: Circuit, name: str, conducts: str, which: int) -> list[str]:
    """A gate's signal over one period as a periodic piecewise linear source: 1 while the switch is closed."""
    edge = 1.0 / circuit.pwm_hz / EDGE_PARTS
    points, at = [], 0.0
    for seconds, *legs in circuit.gates():
        if seconds > 0.0:
            level = 1 if legs[which] == conducts else 0
            points += [f"{at + edge!r} {level}", f"{at + seconds!r} {level}"]
        at += seconds
    points[0] = "0.0 " + points[0].split()[1]
    return [f"v{name} {name} 0 pwl({' '.join(points)}) r=0"]
