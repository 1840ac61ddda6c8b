"""Units at the edges (pint); plain SI-coherent numbers inside."""

from __future__ import annotations

import difflib
import re
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

from rigtally.errors import UsageError

# Words of the bench that pint does not read, or reads as something else.
_SPELLINGS = {
    "°C": "degC",
    "°F": "degF",
    "℃": "degC",
    "℉": "degF",
    "°": "deg",
    "Ω": "ohm",
    "\u2126": "ohm",
    "µ": "u",
    "μ": "u",
    "·": "*",
    "⋅": "*",
    "²": "**2",
    "³": "**3",
    "⁻¹": "**-1",
    "⁻²": "**-2",
    "%": "percent",
}
_PRESSURE_SUFFIX = re.compile(r"^(bar|mbar|psi|kPa|Pa|MPa)\s*\(?\s*([agd])\s*\)$|^(bar|mbar|psi)([agd])$")
_DIMENSION_WORDS = {
    "[length]": "a length",
    "[mass]": "a mass",
    "[time]": "a time",
    "[mass] / [length] / [time] ** 2": "a pressure",
    "[mass] * [length] / [time] ** 2": "a force",
    "[mass] / [time] ** 2": "a stiffness",
    "[mass] / [time]": "a damping",
    "[temperature]": "a temperature",
    "[length] ** 2": "an area",
    "[length] ** 3": "a volume",
    "[length] ** 3 / [time]": "a volume flow",
    "[mass] / [length] ** 3": "a density",
    "[mass] / [length] / [time]": "a dynamic viscosity",
    "[length] / [time]": "a velocity",
    "[length] / [time] ** 2": "an acceleration",
    "1 / [time]": "a frequency",
    "[current]": "a current",
    "[mass] * [length] ** 2 / [current] / [time] ** 3": "a voltage",
    "[mass] * [length] ** 2 / [time] ** 2": "a torque",
    "[mass] * [length] ** 2 / [time] ** 3": "a power",
    "dimensionless": "a plain number",
}


@dataclass(frozen=True)
class Unit:
    """A unit as written, with its exact way to SI-coherent numbers.

    value_si = value * factor + offset (offset only for °C and °F).
    `si` is the SI-coherent unit's text; `reference` is "a", "g", "d" or "" for a pressure.
    """

    written: str
    si: str
    factor: float
    offset: float = 0.0
    reference: str = ""


@lru_cache(maxsize=1)
def registry() -> Any:
    """The one pint registry of the process."""
    import pint

    units: Any = pint.UnitRegistry(autoconvert_offset_to_baseunit=False)
    units.formatter.default_format = "~"
    return units


def _spelled(text: str) -> str:
    word = text.strip()
    for sign, name in _SPELLINGS.items():
        word = word.replace(sign, name)
    return word.replace("^", "**")


# what most logs are written in, exactly; everything else is read by pint (whose registry takes a while to build)
_COMMON = {
    "s": ("s", 1.0), "ms": ("s", 1e-3), "Hz": ("Hz", 1.0), "kHz": ("Hz", 1e3), "Pa": ("Pa", 1.0), "kPa": ("Pa", 1e3),
    "MPa": ("Pa", 1e6), "bar": ("Pa", 1e5), "mbar": ("Pa", 1e2), "V": ("V", 1.0), "mV": ("V", 1e-3),
    "A": ("A", 1.0), "mA": ("A", 1e-3), "N": ("N", 1.0), "kN": ("N", 1e3), "m": ("m", 1.0), "mm": ("m", 1e-3),
    "rad/s": ("rad/s", 1.0), "m/s": ("m/s", 1.0),
}  # fmt: skip


@lru_cache(maxsize=512)
def unit(text: str) -> Unit:
    """Read a unit such as "kPa", "mV/kPa", "m^3/s", "°C", "bar(g)".

    Raises
    ------
    UsageError
        code "unknown-unit", with near words.
    """
    written = text.strip()
    if written in ("", "-", "1"):
        return Unit(written, "", 1.0)
    if written in _COMMON:
        si, factor = _COMMON[written]
        return Unit(written, si, factor)
    suffix = _PRESSURE_SUFFIX.match(written)
    reference = ""
    word = _spelled(written)
    if suffix:
        word = suffix.group(1) or suffix.group(3)
        reference = suffix.group(2) or suffix.group(4)
    units = registry()
    try:
        parsed = units.Unit(word)
        zero = units.Quantity(0.0, parsed).to_base_units()
        one = units.Quantity(1.0, parsed).to_base_units()
    except Exception:
        raise UsageError(
            f"unit {written!r} is not known",
            do=_near(written),
            code="unknown-unit",
        ) from None
    offset = float(zero.magnitude)
    factor = float(one.magnitude) - offset
    if offset == 0.0:
        # one exact conversion is better than the difference of two
        factor = float(one.magnitude)
    return Unit(written, si_text(str(parsed)), factor, offset, reference)


@lru_cache(maxsize=512)
def si_text(text: str) -> str:
    """The SI-coherent unit of the same dimension, in a short form ("Pa", "m/s", "rad/s")."""
    units = registry()
    if text.strip() in ("", "-", "1"):
        return ""
    base = units.Quantity(1.0, units.Unit(_spelled(text))).to_base_units().units
    if "radian" in str(units.Unit(_spelled(text)).dimensionality):
        return f"{base:~}"
    for name in _COHERENT:
        if units.Unit(name).dimensionality == base.dimensionality and not base.dimensionless:
            if name == "Hz":
                angular = re.search(r"rad|rev|rpm|cycle|turn|deg", text)
                return "rad/s" if angular else ("1/s" if re.search(r"/\s*s|s\*\*-1", text) else "Hz")
            return name
    if base.dimensionless:
        return "rad" if re.search(r"rad|deg|rev|turn|arcmin|°", text) else ""
    return f"{base:~}".replace(" ** ", "^").replace(" / ", "/").replace(" * ", "*").replace(" ", "")


_COHERENT = (
    "Pa", "N", "m", "kg", "s", "V", "A", "ohm", "F", "H", "C", "K", "W", "Hz", "m/s", "m/s^2", "m^2",
    "m^3", "m^3/s", "N*m", "N/m", "Pa*s", "kg/m^3", "m^3/Pa", "Pa*s/m^3", "kg*m^2", "V*s", "K/W", "J/K",
)  # fmt: skip


def dimension(text: str) -> str:
    """The dimension of a unit in words ("a pressure"), for messages."""
    units = registry()
    if text.strip() in ("", "-", "1"):
        return "a plain number"
    found = units.Unit(_spelled(text)).dimensionality
    return _DIMENSION_WORDS.get(str(found), f"of dimension {found}")


def same_dimension(first: str, second: str) -> bool:
    """Whether two units measure the same kind of quantity."""
    if unit(first).si == unit(second).si:
        return True
    units = registry()

    def of(text: str) -> Any:
        plain = text.strip() in ("", "-", "1")
        return units.Unit("dimensionless" if plain else _spelled(unit(text).si or text)).dimensionality

    return bool(of(first) == of(second))


def ratio(numerator: str, denominator: str, power_of_time: int = 0) -> str:
    """The SI-coherent unit of output over input times seconds to a power, simplified."""
    if numerator == denominator and not power_of_time:
        return ""
    units = registry()
    over = units.Unit(_spelled(numerator) if numerator else "dimensionless") / units.Unit(
        _spelled(denominator) if denominator else "dimensionless"
    )
    if power_of_time:
        over = over * units.Unit("s") ** power_of_time
    if over.dimensionless:
        return ""
    return f"{over:~C}".replace("**", "^")


def _near(written: str) -> str:
    known = [
        "Pa", "kPa", "MPa", "bar", "mbar", "psi", "m", "mm", "um", "V", "mV", "A", "mA", "N", "kN", "rad/s",
        "rpm", "Hz", "kHz", "s", "ms", "us", "kg", "g", "degC", "K", "m/s", "m/s^2", "L/min",
    ]  # fmt: skip
    close = difflib.get_close_matches(written, known, n=1, cutoff=0.5)
    return f"did you mean {close[0]!r}?" if close else "write it as pint reads it, e.g. 'kPa' or 'mV/kPa'"
