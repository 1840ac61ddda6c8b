"""Numbers as a reader wants them: the uncertainty to two digits, the value to the same place.

JCGM 100:2008, 7.2.6. What is not determined, or is held, is said in words and never printed as certainty.
"""

from __future__ import annotations

import math
from decimal import ROUND_HALF_EVEN, Decimal

from rigtally.quantities.uncertain import Uncertain

_PREFIXES = {-12: "p", -9: "n", -6: "µ", -3: "m", 0: "", 3: "k", 6: "M", 9: "G"}


def rounded(value: float, u: float) -> tuple[str, str]:
    """Value and u as text, u with two significant digits.

    Very large or small values carry a common power of ten ("(1.234", "0.012)e-12" is left to `quantity`).
    """
    if not (math.isfinite(value) and math.isfinite(u) and u > 0):
        return plain(value), ""
    place = math.floor(math.log10(u)) - 1
    step = Decimal(1).scaleb(place)
    shown = Decimal(repr(u)).quantize(step, rounding=ROUND_HALF_EVEN)
    if shown >= Decimal(100).scaleb(place):
        step = Decimal(1).scaleb(place + 1)
        shown = shown.quantize(step, rounding=ROUND_HALF_EVEN)
    number = Decimal(repr(value)).quantize(step, rounding=ROUND_HALF_EVEN)
    if place >= 1:
        return f"{number:.0f}", f"{shown:.0f}"
    return f"{number:f}", f"{shown:f}"


def plain(value: float, digits: int = 6) -> str:
    """A number without a stated uncertainty."""
    if math.isnan(value):
        return "–"
    if math.isinf(value):
        return "∞" if value > 0 else "−∞"
    return f"{value:.{digits}g}"


def quantity(q: Uncertain, *, unit: bool = True) -> str:
    """Value ± u with the unit: "33.56 ± 0.12 rad/s"; "(4.015 ± 0.088)e-08 m/Pa"."""
    tail = f" {q.unit}" if unit and q.unit else ""
    if not math.isfinite(q.value):
        return "not determined"
    if not math.isfinite(q.u):
        return f"about {plain(q.value, 3)}{tail} (not determined)"
    if q.u == 0:
        return f"{plain(q.value)}{tail} (exact)"
    size = max(abs(q.value), q.u)
    power = math.floor(math.log10(size)) if size > 0 else 0
    if -3 <= power < 6:
        value, u = rounded(q.value, q.u)
        return f"{value} ± {u}{tail}"
    value, u = rounded(q.value / 10.0**power, q.u / 10.0**power)
    return f"({value} ± {u})e{power:+03d}{tail}"


def interval(q: Uncertain, probability: float = 0.95) -> str:
    """The coverage interval: "33.3 to 33.8"; an open end is named."""
    low, high = q.interval(probability)
    if not math.isfinite(q.value) or math.isnan(low) or math.isnan(high):
        return "not determined"
    digits = 5
    if math.isfinite(q.u) and q.u > 0 and q.value:
        digits = min(max(2 + math.ceil(math.log10(max(abs(q.value) / q.u, 1.0))), 3), 9)
    return f"{plain(low, digits)} to {plain(high, digits)}"


def percent(share: float, digits: int = 1) -> str:
    """A share as a percentage."""
    return "–" if not math.isfinite(share) else f"{100.0 * share:.{digits}f} %"


def engineering(value: float, unit: str) -> str:
    """A value with a prefix for single-letter units ("3.1 pF"), else a power of ten."""
    if value == 0 or not math.isfinite(value):
        return f"{plain(value)} {unit}".strip()
    simple = unit in ("Pa", "V", "A", "N", "F", "H", "ohm", "Hz", "s", "m")
    power = 3 * math.floor(math.log10(abs(value)) / 3)
    if simple and power in _PREFIXES:
        return f"{value / 10.0**power:.4g} {_PREFIXES[power]}{unit}"
    return f"{value:.4g} {unit}".strip()
