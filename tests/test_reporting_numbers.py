"""Numbers as they are printed: JCGM 100:2008, 7.2.6 (u to at most two digits, the value to the same place)."""

from __future__ import annotations

import math
import re

import numpy as np
import pytest

from rigtally.quantities.uncertain import Uncertain
from rigtally.reporting.numbers import engineering, interval, percent, plain, quantity, rounded

VALUE_U_TEXT = [
    (10.0573, 0.027, ("10.057", "0.027")),  # JCGM 100:2008, 7.2.6: 10.057 62 Ω with u = 27 mΩ is given as 10.058
    (10.05762, 0.027, ("10.058", "0.027")),
    (33.5612, 0.1249, ("33.56", "0.12")),
    (33.5612, 0.0994, ("33.561", "0.099")),
    (33.5612, 0.0996, ("33.56", "0.10")),  # 0.0996 rounds up into the next place
    (33.5612, 0.9949, ("33.56", "0.99")),
    (33.5612, 0.9951, ("33.6", "1.0")),
    (33.5612, 9.949, ("33.6", "9.9")),
    (33.5612, 9.951, ("34", "10")),
    (33561.2, 99.4, ("33561", "99")),
    (33561.2, 99.6, ("33560", "100")),
    (33561.2, 1249.0, ("33600", "1200")),
    (-0.00312, 0.00021, ("-0.00312", "0.00021")),
]


@pytest.mark.parametrize(("value", "u", "text"), VALUE_U_TEXT)
def test_rounding_at_the_boundaries(value: float, u: float, text: tuple[str, str]) -> None:
    """u has two significant digits, also where rounding carries; the value ends at the same place."""
    assert rounded(value, u) == text


def test_rounding_keeps_within_half_a_place() -> None:
    """Over twelve decades the printed value and u differ from the true ones by no more than half the last place."""
    rng = np.random.default_rng(7)
    for _ in range(2000):
        u = float(10 ** rng.uniform(-6, 6))
        value = float(rng.normal() * u * 10 ** rng.uniform(0, 4))
        shown, shown_u = rounded(value, u)
        place = 10.0 ** (math.floor(math.log10(float(shown_u))) - 1)
        assert abs(float(shown) - value) <= 0.5000001 * place
        assert abs(float(shown_u) - u) <= 0.5000001 * place
        assert len(re.sub(r"^[0.]+", "", shown_u.replace(".", "")).rstrip()) >= 2


@pytest.mark.parametrize(
    ("q", "text"),
    [
        (Uncertain(33.5612, 0.1249, "rad/s"), "33.56 ± 0.12 rad/s"),
        (Uncertain(4.0151e-8, 8.8e-10, "m*s/Pa"), "(4.015 ± 0.088)e-08 m*s/Pa"),
        (Uncertain(2.53e9, 4e7, "Pa*s/m^3"), "(2.530 ± 0.040)e+09 Pa*s/m^3"),
        (Uncertain(1.0, 0.0, ""), "1 (exact)"),
        (Uncertain(12.3, math.nan, "Hz"), "about 12.3 Hz (not determined)"),
        (Uncertain(12.3, math.inf, "Hz"), "about 12.3 Hz (not determined)"),
        (Uncertain(math.nan, math.nan, "Hz"), "not determined"),
    ],
)
def test_a_quantity_never_looks_more_certain_than_it_is(q: Uncertain, text: str) -> None:
    """Unknown u is said in words; an exact value says that it was taken as exact; small values carry a power."""
    assert quantity(q) == text


def test_value_smaller_than_its_u() -> None:
    """The common power of ten is that of the larger of the two."""
    assert quantity(Uncertain(1e-12, 2.3e-8, "s")) == "(0.0 ± 2.3)e-08 s"


def test_interval_is_said_with_digits_enough() -> None:
    """The ends differ in the printed digits; an undetermined quantity has none."""
    assert interval(Uncertain(100.0, 0.001, "Hz")) == "99.99804 to 100.002"
    assert interval(Uncertain(100.0, math.nan, "Hz")) == "not determined"


def test_plain_numbers() -> None:
    """NaN and infinities are words and signs, prefixes only on simple units."""
    assert plain(math.nan) == "–"
    assert plain(-math.inf) == "−∞"
    assert percent(0.1234) == "12.3 %"
    assert percent(math.nan) == "–"
    assert engineering(3.1e-12, "F") == "3.1 pF"
    assert engineering(3.1e-12, "m^3/Pa") == "3.1e-12 m^3/Pa"
    assert engineering(0.0, "V") == "0 V"
