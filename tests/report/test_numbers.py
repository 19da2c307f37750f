"""The digits that an uncertainty leaves. Examples of JCGM 100:2008, 7.2.2 and 7.2.6, are quoted from memory."""

from __future__ import annotations

from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from sweeprig.report import numbers


def test_value_ends_where_the_uncertainty_ends() -> None:
    """10.05762 ohm with 27 mohm is written 10.058 (JCGM 100:2008, 7.2.6; from memory)."""
    assert numbers.value_and_u(10.05762, 0.027) == "10.058 ± 0.027"


def test_gram_example() -> None:
    """100.02147 g with U = 0.00079 g keeps its five decimals (JCGM 100:2008, 7.2.4; from memory)."""
    assert numbers.statement(100.02147, 0.00035, 2.26, "g") == "(100.02147 ± 0.00079) g (k = 2.3)"


@pytest.mark.parametrize(
    ("u", "place"),
    [(28.05, 0), (10.47, 0), (0.1534, -2), (412.0, 1), (9.96, 0), (0.0996, -2), (99.5, 1), (1.0, -1), (1e-7, -8)],
)
def test_two_digits_remain_after_rounding(u: float, place: int) -> None:
    """The last digit is the second significant one of the rounded uncertainty, also where rounding carries over."""
    assert numbers.last_place(u) == place


@given(st.floats(1e-9, 1e6))
def test_uncertainty_always_has_two_digits(u: float) -> None:
    """Whatever the uncertainty, it is written with two significant digits: decimal arithmetic is the judge."""
    written = Decimal(numbers.at_place(u, numbers.last_place(u)))
    digits = "".join(map(str, written.as_tuple().digits)).lstrip("0")
    kept = written.adjusted() - numbers.last_place(u) + 1
    assert kept == 2
    assert digits[2:].strip("0") == ""


@given(st.floats(-1e5, 1e5), st.floats(1e-3, 1e3))
def test_rounding_moves_a_value_by_half_a_last_digit_at_most(value: float, u: float) -> None:
    """The written value differs from the exact one by at most half a unit of the last digit kept."""
    place = numbers.place_for(value, u)
    written = Decimal(numbers.at_place(value, place).replace(numbers.MINUS, "-"))
    assert abs(written - Decimal(repr(value))) <= Decimal(5).scaleb(place - 1)


@given(st.floats(0.01, 1e4), st.floats(1e-3, 1e2))
def test_bounds_stay_bounds(value: float, u: float) -> None:
    """An upper bound is never rounded below itself, a lower one never above."""
    assert Decimal(numbers.at_most(value, u).removeprefix("≤ ")) >= Decimal(repr(value))
    assert Decimal(numbers.at_least(value, u).removeprefix("≥ ")) <= Decimal(repr(value))


def test_bound_is_rounded_up() -> None:
    """14.161 with u = 0.3 is written as at most 14.17, not 14.16."""
    assert numbers.at_most(14.161, 0.3) == "≤ 14.17"


def test_bound_without_uncertainty_keeps_three_digits() -> None:
    """A bound that carries no u of its own claims three digits, rounded to its safe side."""
    assert numbers.at_most(8.1132, None) == "≤ 8.12"
    assert numbers.at_least(9.1867, None) == "≥ 9.18"


def test_statement_names_k() -> None:
    """Value, U in the unit, and the coverage factor stand in one line."""
    assert numbers.statement(12.3412, 0.0765, 1.96, "%", 12.19, 12.49) == "(12.34 ± 0.15) % (k = 2.0)"


def test_lopsided_interval_is_not_written_with_plus_minus() -> None:
    """Where the interval leans to one side, the interval is written and ± is not."""
    assert numbers.statement(13.6, 0.31, 1.96, "%", 13.2, 14.9) == "13.60 % (13.20 to 14.90 %)"


def test_value_without_uncertainty_keeps_four_digits() -> None:
    """Without an uncertainty no more than four significant digits are claimed."""
    assert numbers.statement(1234.567, None, None, "rpm") == "1235 rpm"


def test_whole_tens_are_written_out() -> None:
    """A large uncertainty rounds the value to tens, without an exponent."""
    assert numbers.value_and_u(4812.3, 123.4) == "4810 ± 120"


def test_tiny_uncertainty_does_not_write_endless_digits() -> None:
    """A meaninglessly small uncertainty leaves at most eight digits of the value."""
    assert numbers.at_place(1234.5678912345, numbers.place_for(1234.5678912345, 1e-12)) == "1234.5679"


def test_minus_is_a_minus_sign() -> None:
    """A negative value carries the typographic minus; a zero carries none."""
    assert numbers.at_place(-3.14159, -2) == "\N{MINUS SIGN}3.14"
    assert numbers.at_place(-0.0004, -2) == "0.00"
