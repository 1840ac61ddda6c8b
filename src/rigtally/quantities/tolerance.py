"""A value as it is written with its tolerance: "4.00 mm ± 0.05 mm", "…, u = 0.02 mm", "…, U = 0.04 mm".

Limits are rectangular, u = half-width/√3 (JCGM 100:2008, 4.3.7); an expanded uncertainty is divided by its k
(2 unless said); a bare value is taken as exact.
"""

from __future__ import annotations

import math
import re

from rigtally.errors import UsageError
from rigtally.quantities.uncertain import Uncertain
from rigtally.quantities.units import Unit, dimension, same_dimension, unit

_NUMBER = r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?"
_PLAIN = re.compile(rf"^({_NUMBER})\s*(.*)$")
_LIMITS = re.compile(r"\s*(?:±|\+/-|\+-)\s*")
_STATED = re.compile(rf"^([uUk])\s*=\s*({_NUMBER})\s*(.*)$")


def read_quantity(
    text: str | float | int, expected: str, *, positive: bool = False, key: str = "value"
) -> Uncertain:
    """A written value as an SI-coherent `Uncertain`.

    Parameters
    ----------
    text : str or number
        A bare number is allowed only where a dimensionless value is expected.
    expected : str
        A unit of the dimension that is needed, "" for a plain number.
    positive : bool
        Whether the value, and its lower limit, must lie above 0.
    key : str
        What the value is called, for messages.

    Raises
    ------
    UsageError
        Codes "bad-value", "no-unit", "wrong-unit", "bad-tolerance", "not-positive".
    """
    if isinstance(text, bool) or not isinstance(text, str | float | int):
        shown = str(text).lower() if isinstance(text, bool) else str(text)
        raise UsageError(f"{key} = {shown} is not a value", do=_example(key, expected), code="bad-value")
    if not isinstance(text, str):
        if expected:
            raise UsageError(f"{key} = {text} has no unit", do=_example(key, expected), code="no-unit")
        out = Uncertain(_finite(text), 0.0, "", distribution="exact")
        _check(out, positive, key, text)
        return out
    parts = [part.strip() for part in text.split(",")]
    for part in parts[1:]:
        if not _STATED.match(part):
            raise UsageError(
                f"{key} = {text!r}: {part!r} is not a tolerance",
                do='write "4.0 mm ± 0.1 mm" or "4.0 mm, u = 0.02 mm", with a decimal point',
                code="bad-tolerance",
            )
    limits = _LIMITS.split(parts[0], maxsplit=1)
    value_text, half_text = limits[0].strip(), limits[1].strip() if len(limits) > 1 else ""
    found = _PLAIN.match(value_text)
    if not found or (len(limits) > 1 and not half_text):
        raise UsageError(f"{key} = {text!r} is not a value", do=_example(key, expected), code="bad-value")
    number, word = float(found.group(1)), found.group(2).strip()
    half_number, half_word = _amount(half_text, key, text, expected) if half_text else (0.0, "")
    if not word and half_word and half_word != "%":
        word = half_word
    if not word and expected:
        raise UsageError(f"{key} = {text!r} has no unit", do=_example(key, expected), code="no-unit")
    size = _unit_of(word, expected, key)
    value = number * size.factor + size.offset
    if half_text:
        if len(parts) > 1:
            raise UsageError(
                f"{key} = {text!r} states limits and a standard uncertainty",
                do="state one of them",
                code="bad-tolerance",
            )
        half = _size(half_number, half_word, value, size, expected, key)
        if half < 0:
            raise UsageError(
                f"{key} = {text!r} has negative limits", do="write ± and a size", code="bad-tolerance"
            )
        out = Uncertain(value, half / math.sqrt(3.0), _si(expected), distribution="rectangular")
    elif len(parts) > 1:
        out = _with_stated(parts[1:], value, size, expected, key, text)
    else:
        out = Uncertain(value, 0.0, _si(expected), distribution="exact")
    if out.u == 0.0 and out.distribution != "exact":
        out = Uncertain(value, 0.0, out.unit, distribution="exact")
    _check(out, positive, key, text)
    return out


def _with_stated(parts: list[str], value: float, size: Unit, expected: str, key: str, text: str) -> Uncertain:
    """u = …, or U = … with its k."""
    said: dict[str, tuple[float, str]] = {}
    for part in parts:
        found = _STATED.match(part)
        if found is None:
            continue
        if found.group(1) in said:
            raise UsageError(
                f"{key} = {text!r} states {found.group(1)} twice", do="state it once", code="bad-tolerance"
            )
        said[found.group(1)] = float(found.group(2)), found.group(3).strip()
    if ("u" in said) == ("U" in said) or ("k" in said and "U" not in said):
        raise UsageError(
            f"{key} = {text!r} needs either u, or U (with its k)",
            do='write "…, u = 0.02 mm" or "…, U = 0.04 mm, k = 2"',
            code="bad-tolerance",
        )
    name = "u" if "u" in said else "U"
    amount = _size(*said[name], value, size, expected, key)
    k = said["k"][0] if "k" in said else 2.0
    if amount < 0 or k <= 0:
        raise UsageError(
            f"{key} = {text!r}: {'k must lie above 0' if k <= 0 else f'{name} must not be negative'}",
            do="write the size of the uncertainty",
            code="bad-tolerance",
        )
    return Uncertain(value, amount if name == "u" else amount / k, _si(expected))


def _amount(text: str, key: str, whole: str, expected: str) -> tuple[float, str]:
    found = _PLAIN.match(text)
    if not found:
        raise UsageError(f"{key} = {whole!r} is not a value", do=_example(key, expected), code="bad-value")
    return float(found.group(1)), found.group(2).strip()


def _size(number: float, word: str, value: float, size: Unit, expected: str, key: str) -> float:
    """A tolerance in SI: a percentage of the value's magnitude, its own unit, or the value's."""
    if word == "%":
        if size.offset:
            raise UsageError(
                f"{key}: a percentage of {size.written} has no meaning", do='write "23 °C ± 1 K"',
                code="bad-tolerance",
            )  # fmt: skip
        return number / 100.0 * (abs(value) if value != 0.0 or expected else 1.0)
    if not word:
        return number * size.factor
    own = _unit_of(word, expected, key)
    return number * own.factor


def _unit_of(word: str, expected: str, key: str) -> Unit:
    """The written unit, checked against the dimension that is needed."""
    if not word:
        return unit("")
    found = unit(word)
    if not same_dimension(found.si or "", expected):
        need = f"in {expected}" if expected else "a plain number"
        raise UsageError(
            f"{key} is {need}; {word!r} is {dimension(word)}", do=_example(key, expected), code="wrong-unit"
        )
    return found


def _si(expected: str) -> str:
    return unit(expected).si if expected else ""


def _finite(number: float) -> float:
    """The number as a float, infinite where a whole number is too large for one."""
    try:
        return float(number)
    except OverflowError:
        return math.inf


def _check(found: Uncertain, positive: bool, key: str, text: str | float) -> None:
    if not (math.isfinite(found.value) and math.isfinite(found.u)):
        raise UsageError(
            f"{key} = {text!r} is not finite", do="write a number that a float can hold", code="bad-value"
        )
    if not positive:
        return
    if found.value <= 0.0:
        raise UsageError(
            f"{key} = {text!r} must lie above 0", do="write its size; directions are in from and to",
            code="not-positive",
        )  # fmt: skip
    if found.distribution == "rectangular" and found.u * math.sqrt(3.0) >= found.value:
        raise UsageError(
            f"{key} = {text!r} has limits that reach 0", do="state u = … instead, or narrower limits",
            code="not-positive",
        )  # fmt: skip


def _example(key: str, expected: str) -> str:
    shown = f"1.00 {expected}".strip()
    return f'write it as {key} = "{shown} ± 1 %"'
