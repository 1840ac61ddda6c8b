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
    "⁻¹": "**-1",
    "⁻²": "**-2",
    "⁻³": "**-3",
    "²": "**2",
    "³": "**3",
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
    "[mass] * [length] ** 2 / [time] ** 3 / [current]": "a voltage",
    "[mass] * [length] ** 2 / [time] ** 2": "a torque",
    "[mass] * [length] ** 2 / [time] ** 3": "a power",
    "[mass] * [length] ** 2 / [time] ** 3 / [current] ** 2": "an electrical resistance",
    "[current] ** 2 * [time] ** 4 / [mass] / [length] ** 2": "a capacitance",
    "[mass] * [length] ** 2 / [time] ** 2 / [current] ** 2": "an inductance",
    "[current] * [time]": "a charge",
    "[mass] * [length] ** 2": "a moment of inertia",
    "[mass] / [length] ** 4 / [time]": "a fluid resistance",
    "[mass] / [length] ** 4": "a fluid inertance",
    "[length] ** 4 * [time] ** 2 / [mass]": "a fluid compliance",
    "[length] ** 2 / [time]": "a kinematic viscosity",
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


_TORQUE = re.compile(r"\b([kmMµμu]?N)\s?m(s?)\b")  # Nm, kNm, Nms: newton metres, not a yarn's number
_EXPONENT = re.compile(r"\*\*\s*\(?\s*[+-]?\d{1,2}(?:\.\d+)?\s*\)?(?![\d.])(?!\s*\*\*)")
LONGEST = 80  # letters of a written unit


def _spelled(text: str) -> str:
    word = _TORQUE.sub(lambda m: f"{m.group(1)}*m*s" if m.group(2) else f"{m.group(1)}*m", text.strip())
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
        if len(word) > LONGEST or len(_EXPONENT.findall(word)) != word.count("**"):
            raise ValueError("no unit is written so")
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
    return _by_parts(units.Unit(_spelled(text)))


def _by_parts(written: Any) -> str:
    """Each part in its SI-coherent unit: "mV/kPa" is in "V/Pa"."""
    units = registry()
    parts = dict(written._units)
    if len(parts) == 1 and set(parts.values()) == {1}:
        base = units.Quantity(1.0, written).to_base_units().units
        return f"{base:~C}".replace("**", "^")
    out = units.Unit("dimensionless")
    for name, power in parts.items():
        out = out * units.Unit(_spelled(si_text(name)) or "dimensionless") ** power
    return f"{out:~C}".replace("**", "^")


_COHERENT = (
    "Pa", "N", "m", "kg", "s", "V", "A", "ohm", "F", "H", "C", "K", "W", "Hz", "m/s", "m/s^2", "m^2",
    "m^3", "m^3/s", "N*m", "N/m", "Pa*s", "kg/m^3", "m^3/Pa", "Pa*s/m^3", "kg*m^2", "V*s", "K/W", "J/K",
)  # fmt: skip


def dimension(text: str) -> str:
    """The dimension of a unit in words ("a pressure"), for messages."""
    units = registry()
    if text.strip() in ("", "-", "1"):
        return "a plain number"
    found = units.Unit(_spelled(unit(text).si) or "dimensionless").dimensionality
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
        "Pa", "kPa", "MPa", "bar", "mbar", "psi", "m", "mm", "um", "metre", "V", "mV", "A", "mA", "N", "kN", "rad/s",
        "rpm", "Hz", "kHz", "s", "ms", "us", "kg", "g", "degC", "K", "m/s", "m/s^2", "L/min",
    ]  # fmt: skip
    close = difflib.get_close_matches(written, known, n=1, cutoff=0.5)
    return f"did you mean {close[0]!r}?" if close else "write it as pint reads it, e.g. 'kPa' or 'mV/kPa'"
