"""Units as loggers write them: in brackets, after a stroke, in a row of their own."""

from __future__ import annotations

import re

from rigtally.errors import UsageError
from rigtally.quantities.units import Unit, unit

# Bench spellings that are one thing only.
_SPELLED = {
    "sec": "s", "secs": "s", "seconds": "s", "second": "s", "sek": "s", "msec": "ms", "msecs": "ms",
    "millisec": "ms", "milliseconds": "ms", "usec": "us", "microseconds": "us", "minutes": "min",
    "hours": "h", "hrs": "h", "hr": "h", "days": "day", "psi": "psi", "bar": "bar", "kpa": "kPa",
    "volt": "V", "volts": "V", "amp": "A", "amps": "A", "ampere": "A", "celsius": "degC", "degc": "degC",
    "deg c": "degC", "fahrenheit": "degF", "degf": "degF", "kelvin": "K", "nm": "", "hertz": "Hz",
    "percent": "percent", "l/min": "l/min", "lpm": "l/min",
}  # fmt: skip
_EXACT = {"Nm": "N*m", "N m": "N*m", "kNm": "kN*m", "mNm": "mN*m", "m/s2": "m/s**2", "min-1": "1/min"}
# Two readings that a bench meets both ways; the one who knows must say.
AMBIGUOUS = {
    "C": "°C or coulomb",
    "F": "°F or farad",
    "g": "gram or the acceleration of gravity",
    "G": "gauss or the acceleration of gravity",
}
_BRACKETS = re.compile(r"^(?P<name>.*?)\s*(?:\[(?P<square>[^\[\]]*)\]|\((?P<round>.*)\))\s*$", re.DOTALL)
_STROKE = re.compile(r"^(?P<name>[^/]+?)(?:\s+/\s+|/|\s+in\s+|,\s*)(?P<unit>\S+)$")
# After a stroke only what cannot be half of a derivative or ratio of channels.
_AFTER_STROKE = {
    "s", "ms", "us", "µs", "min", "h", "Pa", "hPa", "kPa", "MPa", "bar", "mbar", "psi", "V", "mV", "A", "mA",
    "N", "kN", "mm", "cm", "µm", "°C", "degC", "K", "Hz", "kHz", "rpm", "%", "rad", "deg", "°", "m/s", "mm/s",
    "m/s²", "m/s^2", "W", "kW", "l/min",
}  # fmt: skip
NO_UNIT = ("", "-", "–", "1", "[-]", "(-)")


def known(text: str) -> Unit | None:
    """The unit, or None where it is not known or means two things."""
    written = text.strip()
    if written in AMBIGUOUS:
        return None
    word = _EXACT.get(written) or _SPELLED.get(written.lower(), written) or written
    try:
        found = unit(word)
    except UsageError:
        return None
    return Unit(written, found.si, found.factor, found.offset, found.reference)


def stated(text: str, channel: str, where: str) -> Unit:
    """A unit that the caller states.

    Raises
    ------
    UsageError
        code "unknown-unit".
    """
    found = known(text)
    if found is not None:
        return found
    if text.strip() in AMBIGUOUS:
        raise UsageError(
            f"unit {text!r} of {channel!r} may be {AMBIGUOUS[text.strip()]}",
            where=where,
            do="write it out, as degC, coulomb, gram or standard_gravity",
            code="unknown-unit",
        )
    return unit(text)


def split_name(text: str) -> tuple[str, str | None]:
    """Name and written unit of a heading: "p [kPa]", "p (kPa)", "p / kPa", "p in kPa".

    What stands in round brackets and is no known unit belongs to the name. Square brackets always hold a
    unit. None where no unit is written.
    """
    heading = " ".join(text.split())
    found = _BRACKETS.match(heading)
    if found:
        name = found.group("name").strip() or heading
        square, bracket = found.group("square"), found.group("round")
        if square is not None:
            return name, square.strip()
        if bracket is not None and (bracket.strip() in NO_UNIT or known(bracket)):
            return (name, bracket.strip()) if not re.fullmatch(r"[A-Z]", bracket) else (heading, None)
        return heading, None
    stroke = _STROKE.match(heading)
    if stroke and stroke.group("unit") in _AFTER_STROKE and not re.match(r"d[A-Za-z]$", stroke.group("name")):
        return stroke.group("name").strip(), stroke.group("unit")
    return heading, None


def is_unit_row(cells: list[str]) -> bool:
    """Whether a row of cells states units (a few may be ones that are not known)."""
    bare = [cell.strip().strip("[]()").strip() for cell in cells]
    real = [cell for cell in bare if cell not in NO_UNIT]
    if not real:
        return bool(cells) and all(cell.strip() for cell in cells)
    units = sum(known(cell) is not None or cell in AMBIGUOUS for cell in real)
    return units > 0.5 * len(real)
