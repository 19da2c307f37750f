"""One invented motor of each kind, and machines of them on 12 V, for the tests of the kinds of motor."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from sweeprig.simbench.kinds.control_input import ControlInputFan, ControlInputTruth
from sweeprig.simbench.kinds.electronic import ElectronicFan, ElectronicTruth
from sweeprig.simbench.kinds.geared import GearedMotor
from sweeprig.simbench.kinds.prescribed import PrescribedMotor, PrescribedTruth
from sweeprig.simbench.kinds.stepped import Stepped
from sweeprig.simbench.motor_truth import MotorTruth

ELECTRONIC = ElectronicTruth(
    resistance_ohm=14.0, torque_constant_nm_per_a=0.024, inertia_kg_m2=9e-6, quadratic_load_nm_s2=4e-8,
    viscous_friction_nm_s=4e-6, running_friction_nm=0.5e-3, running_friction_spread_percent=15.0,
    breakaway_friction_nm=2.5e-3, breakaway_friction_spread_percent=8.0, friction_correlation_s=0.5,
    barrier_angle_rad=0.6, own_amps=0.012, lowest_volts=4.5, wake_s=0.4e-3, holdup_farad=0.0, charge_ohm=0.5,
    soft_start_s=0.0, lock_detect_s=0.5, lock_rest_s=3.0, backward_limit_rpm=200.0, draught_rpm=0.0,
    draught_spread_percent=0.0, tach_chopped=False,
)  # fmt: skip
CHOPPED_TACH = replace(ELECTRONIC, tach_chopped=True)
HELD_UP = replace(ELECTRONIC, holdup_farad=22e-6, soft_start_s=1.0)
FOUR_WIRE = ControlInputTruth(
    maximum_rpm=4200.0, nominal_volts=12.0, lowest_volts=6.0, minimum_duty_percent=20.0, minimum_rpm_percent=22.0,
    below_minimum="A", bend_percent=4.0, time_constant_s=0.5, coast_time_constant_s=1.2, coast_rpm_per_s=150.0,
    own_amps=0.02, full_amps=0.35, spike_amps=0.9, spike_s=0.4, start_rpm_percent=28.0, start_pulse_s=1.0,
    fail_percent=9.0, spread_percent=0.7, correlation_s=1.0, speed_spread_percent=0.2,
)  # fmt: skip
PRESCRIBED = PrescribedTruth(
    law="exponential", stall_duty_percent=12.0, stall_spread_percent=0.4, hold_time_s=20.0, start_duty_percent=18.0,
    start_spread_percent=0.5, floor_per_hour=0.0, scatter_percent=0.0, drift_percent_per_hour=0.0, top_rpm=3000.0,
    dead_percent=3.0, time_constant_s=0.3, full_amps=0.4,
)  # fmt: skip
GEARED = MotorTruth(
    resistance_ohm=9.0, inductance_henry=5e-3, torque_constant_nm_per_a=0.025, inertia_kg_m2=8e-6,
    quadratic_load_nm_s2=0.0, viscous_friction_nm_s=1e-6, running_friction_nm=4e-3,
    running_friction_spread_percent=5.0, breakaway_friction_nm=9e-3, breakaway_friction_spread_percent=4.0,
    friction_correlation_s=1.0, barrier_angle_rad=0.4, thermal_resistance_k_per_w=9.0, thermal_time_constant_s=300.0,
)  # fmt: skip


class Kinds:
    """The true values, and machines of them."""

    electronic_truth, held_up_truth, chopped_tach_truth = ELECTRONIC, HELD_UP, CHOPPED_TACH
    four_wire_truth, prescribed_truth, geared_truth = FOUR_WIRE, PRESCRIBED, GEARED

    @staticmethod
    def on_supply(machine: Stepped, limit_amps: float = 3.0) -> None:
        machine.set_supply(12.0, limit_amps, True)

    @staticmethod
    def electronic(truth: ElectronicTruth = ELECTRONIC, seed: int = 1, limit_amps: float = 3.0) -> ElectronicFan:
        fan = ElectronicFan(truth, 2.0, np.random.default_rng(seed))
        Kinds.on_supply(fan, limit_amps)
        return fan

    @staticmethod
    def four_wire(truth: ControlInputTruth = FOUR_WIRE, seed: int = 1, limit_amps: float = 3.0) -> ControlInputFan:
        """Its input is held at 0 % from the start: open, it would run."""
        fan = ControlInputFan(truth, 2.0, np.random.default_rng(seed))
        fan.set_drive(25e3, 0.0, True)
        Kinds.on_supply(fan, limit_amps)
        return fan

    @staticmethod
    def prescribed(truth: PrescribedTruth = PRESCRIBED, seed: int = 1) -> PrescribedMotor:
        motor = PrescribedMotor(truth, 2.0, np.random.default_rng(seed))
        Kinds.on_supply(motor)
        return motor

    @staticmethod
    def geared(
        backlash_rad: float = 0.05, own_friction_percent: float = 25.0, seed: int = 1, truth: MotorTruth = GEARED
    ) -> GearedMotor:
        motor = GearedMotor(truth, 30.0, backlash_rad, 40.0, own_friction_percent, 60.0, np.random.default_rng(seed))
        Kinds.on_supply(motor)
        return motor

    @staticmethod
    def of_kind(kind: str, seed: int = 1) -> Stepped:
        """A machine of a kind on 12 V, at rest or about to."""
        electronics = {"electronic": ELECTRONIC, "chopped tach": CHOPPED_TACH, "held up": HELD_UP}
        if kind in electronics:
            return Kinds.electronic(electronics[kind], seed)
        if kind == "four wires":
            return Kinds.four_wire(seed=seed)
        return Kinds.prescribed(seed=seed) if kind == "prescribed" else Kinds.geared(seed=seed)

    @staticmethod
    def mean_rpm(machine: Stepped, seconds: float) -> float:
        """Mean speed over the next seconds, rpm, from the angle turned."""
        began, angle = machine.now, machine.angle
        machine.advance(began + seconds)
        return (machine.angle - angle) / seconds * 30.0 / np.pi


@pytest.fixture
def kinds() -> type[Kinds]:
    return Kinds
