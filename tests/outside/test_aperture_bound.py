"""An integrating voltmeter whose aperture is no whole number of PWM periods: its error against the sharp bound.

The bound is derived for this project and was checked numerically over 3,000 random cases by an independent script.
"""

import numpy as np
import pytest

from sweeprig.simbench.chopper import Wave, chopper, motor_voltage_integral, wave


def square_wave(pwm_hz: float, duty_percent: float) -> Wave:
    """1 V or 0 V across the motor: continuous current (L/R is many periods), no back-EMF, no drops."""
    return wave(chopper(1.0, 1.0, 100.0 / pwm_hz, pwm_hz, duty_percent, diode_drop_v=0.0), 0.0)


def largest_error(pwm_hz: float, duty_percent: float, aperture_s: float) -> float:
    """Largest |aperture mean − true mean| over all phases: the error is piecewise linear in the phase of the opening,
    so it is largest where the opening or the closing meets a switching moment.
    """
    shape, on = square_wave(pwm_hz, duty_percent), duty_percent / 100.0 / pwm_hz
    openings = (0.0, on, -aperture_s, on - aperture_s)
    means = [motor_voltage_integral(shape, at, at + aperture_s) / aperture_s for at in openings]
    return max(abs(mean - duty_percent / 100.0) for mean in means)


@pytest.mark.parametrize(
    ("aperture_s", "pwm_hz", "duty_percent", "error", "tolerance"),
    [
        (0.020, 1037.0, 30.0, 8.775e-3, 5e-7),
        (0.100, 987.6, 50.0, 1.215e-3, 5e-7),
        (1.0 / 60.0, 1234.5, 25.0, 6.987e-3, 5e-7),
        (0.020, 30.0, 50.0, 0.3333, 5e-5),
    ],
)
def test_printed_examples(
    aperture_s: float, pwm_hz: float, duty_percent: float, error: float, tolerance: float
) -> None:
    """The four printed examples (independent script, four digits) come out of the integration of the waveform."""
    assert largest_error(pwm_hz, duty_percent, aperture_s) == pytest.approx(error, abs=tolerance)


def test_bound_over_random_apertures() -> None:
    """For any aperture, frequency and duty the largest error is the sharp formula, below V·D(1−D)/(fT)."""
    rng = np.random.default_rng(11)
    for _ in range(500):
        aperture, pwm, duty = rng.uniform(1e-3, 0.2), rng.uniform(20.0, 3e4), rng.uniform(1.0, 99.0)
        d, r = duty / 100.0, (pwm * aperture) % 1.0
        sharp = max(min(d, r) - r * d, r * d - max(0.0, r + d - 1.0)) / (pwm * aperture)
        error = largest_error(pwm, duty, aperture)
        assert error == pytest.approx(sharp, abs=1e-11)
        assert error <= d * (1.0 - d) / (pwm * aperture) + 1e-11


def test_whole_periods_make_no_error() -> None:
    """An aperture of whole periods reads the mean at any phase, also with a current-free gap and diode drop."""
    shape = wave(chopper(12.0, 6.0, 3e-3, 1000.0, 30.0), 4.0)
    for opening in np.linspace(0.0, 1e-3, 37):
        reading = motor_voltage_integral(shape, float(opening), float(opening) + 0.020) / 0.020
        assert reading == pytest.approx(shape.mean_motor_volts, abs=1e-12)
