"""Values as they are written, with every way to state a tolerance."""

from __future__ import annotations

import math

import pytest

from rigtally.errors import UsageError
from rigtally.quantities.tolerance import read_quantity

ROOT3 = math.sqrt(3.0)

WRITTEN = [
    # text, needed unit, value, u, distribution; by hand from the page of the rig file (GUM 4.3.7 for limits)
    ("4.00 mm", "m", 4e-3, 0.0, "exact"),
    ("4.00 mm ± 0.05 mm", "m", 4e-3, 5e-5 / ROOT3, "rectangular"),
    ("4.00 ± 0.05 mm", "m", 4e-3, 5e-5 / ROOT3, "rectangular"),
    ("4.00 mm ± 1 %", "m", 4e-3, 4e-5 / ROOT3, "rectangular"),
    ("4.00 mm +/- 0.05 mm", "m", 4e-3, 5e-5 / ROOT3, "rectangular"),
    ("4.00mm±0.05mm", "m", 4e-3, 5e-5 / ROOT3, "rectangular"),
    ("4.00 mm ± 0.05", "m", 4e-3, 5e-5 / ROOT3, "rectangular"),
    ("0.640 m ± 1 mm", "m", 0.64, 1e-3 / ROOT3, "rectangular"),
    ("4.00 mm, u = 0.02 mm", "m", 4e-3, 2e-5, "normal"),
    ("4.00 mm, u = 20 µm", "m", 4e-3, 2e-5, "normal"),
    ("4.00 mm, u = 0.5 %", "m", 4e-3, 2e-5, "normal"),
    ("4.00 mm, U = 0.04 mm", "m", 4e-3, 2e-5, "normal"),
    ("4.00 mm, U = 0.044 mm, k = 2.2", "m", 4e-3, 2e-5, "normal"),
    ("4.00 mm ± 0 mm", "m", 4e-3, 0.0, "exact"),
    ("3.1e-12 m^3/Pa ± 8 %", "m^3/Pa", 3.1e-12, 0.08 * 3.1e-12 / ROOT3, "rectangular"),
    ("1.42 GPa ± 10 %", "Pa", 1.42e9, 1.42e8 / ROOT3, "rectangular"),
    ("23 °C, u = 1 K", "K", 296.15, 1.0, "normal"),
    ("40 °C ± 2 °C", "K", 313.15, 2.0 / ROOT3, "rectangular"),
    ("50 °F ± 9 °F", "K", 283.15, 5.0 / ROOT3, "rectangular"),
    ("-2.5 ± 1 %", "", -2.5, 0.025 / ROOT3, "rectangular"),
    ("0 ± 0.3 %", "", 0.0, 0.003 / ROOT3, "rectangular"),
    ("12", "", 12.0, 0.0, "exact"),
    (12, "", 12.0, 0.0, "exact"),
    (0.62, "", 0.62, 0.0, "exact"),
    ("47 kΩ ± 5 %", "ohm", 47e3, 2350 / ROOT3, "rectangular"),
    ("0.0500 V*s/rad", "V*s/rad", 0.05, 0.0, "exact"),
    ("0.0500 N*m/A", "V*s/rad", 0.05, 0.0, "exact"),
    ("3000 rpm", "rad/s", 100 * math.pi, 0.0, "exact"),
]


@pytest.mark.parametrize("text, needed, value, u, distribution", WRITTEN, ids=[str(w[0]) for w in WRITTEN])
def test_written_value(text: str | float, needed: str, value: float, u: float, distribution: str) -> None:
    """Each way of writing a value gives its number, its standard uncertainty and its distribution in SI."""
    found = read_quantity(text, needed)
    assert found.value == pytest.approx(value, rel=1e-12, abs=0.0 if value else 1e-15)
    assert found.u == pytest.approx(u, rel=1e-12)
    assert found.distribution == distribution


REFUSED = [
    ("4 kg", "m", "wrong-unit"), ("4 mm ± 1 kg", "m", "wrong-unit"), ("4", "m", "no-unit"), (4, "m", "no-unit"),
    ("", "m", "bad-value"), ("mm", "m", "bad-value"), ("4 mm ±", "m", "bad-value"), ("± 4 mm", "m", "bad-value"),
    ("4 mm ± 0.1 mm ± 0.2 mm", "m", "unknown-unit"), ("4,5 mm", "m", "bad-tolerance"),
    ("4 mm, v = 1 mm", "m", "bad-tolerance"), ("4 mm, u = 1 mm, u = 2 mm", "m", "bad-tolerance"),
    ("4 mm, u = 1 mm, k = 2", "m", "bad-tolerance"), ("4 mm, k = 2", "m", "bad-tolerance"),
    ("4 mm, U = 1 mm, k = 0", "m", "bad-tolerance"), ("4 mm, U = 1 mm, k = -2", "m", "bad-tolerance"),
    ("4 mm, u = -1 mm", "m", "bad-tolerance"), ("4 mm ± -1 mm", "m", "bad-tolerance"),
    ("23 °C ± 1 %", "K", "bad-tolerance"), ("1e999 mm", "m", "bad-value"), ("4 mm, u = 1e999 mm", "m", "bad-value"),
    (math.nan, "", "bad-value"), (math.inf, "", "bad-value"), (10**400, "", "bad-value"), (True, "", "bad-value"),
    ("nan", "", "bad-value"), ("4 metrs", "m", "unknown-unit"), ("2 mm", "", "wrong-unit"),
]  # fmt: skip


@pytest.mark.parametrize("text, needed, code", REFUSED, ids=[f"{r[0]!s:.30} in {r[1]}" for r in REFUSED])
def test_refused_value(text: str | float, needed: str, code: str) -> None:
    """What cannot be read is refused by name, with what to do, and says no place (the file's reader knows it)."""
    with pytest.raises(UsageError) as caught:
        read_quantity(text, needed, key="bore")
    assert caught.value.code == code
    assert caught.value.do
    assert caught.value.where == ""


@pytest.mark.parametrize("text", ["0 mm", "-4 mm", "4 mm ± 4 mm", "4 mm ± 100 %", "-4 mm, u = 1 mm"])
def test_positive_quantities(text: str) -> None:
    """A positive quantity has a value above 0, and limits that do not reach 0."""
    read_quantity(text, "m")
    with pytest.raises(UsageError) as caught:
        read_quantity(text, "m", positive=True)
    assert caught.value.code == "not-positive"


def test_units_are_named() -> None:
    """A wrong unit is told in words."""
    with pytest.raises(UsageError, match=r"stiffness is in N/m; 'mm' is a length"):
        read_quantity("3 mm", "N/m", key="stiffness")
