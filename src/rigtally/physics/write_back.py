"""A rig file written back with other values: the user's own text, only the named values replaced."""

from __future__ import annotations

import math
import re
import tomllib
from collections.abc import Mapping
from pathlib import Path

from rigtally.files import write_whole
from rigtally.physics.rig import Rig
from rigtally.physics.rig_lines import find_lines
from rigtally.quantities.uncertain import Uncertain
from rigtally.quantities.units import unit

_WRITTEN = re.compile(r"^\s*[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?\s*([^,±]*?)\s*(?:±|\+/-|,|$)(.*)$")


def save_rig(rig: Rig, new_values: Mapping[str, Uncertain], path: str | Path) -> Path:
    """Write the rig file with new values, each with its standard uncertainty in the unit that the file used.

    Comments and everything else stay. Values without a place of their own in the file (the friction model of a
    line, say) are left out. A static pressure that the file states as gauge is written as absolute.

    Parameters
    ----------
    rig : Rig
    new_values : value name ("gauge chamber.compliance") -> Uncertain, SI
    path : the file to write; replaced at once or not at all
    """
    text, where = rig.text, find_lines(rig.text)
    places = {element.name: number for number, element in enumerate(rig.elements)}
    found: list[tuple[int, int, str]] = []
    for name, value in new_values.items():
        if name not in rig.labels or not math.isfinite(value.value):
            continue
        owner, key = rig.labels[name]
        for table, number, word in (
            ("element", places.get(owner, -1), key),
            (f"medium.{owner}", 0, key),
            (f"value.{name}", 0, "value"),
            ("rig", 0, key if owner == "rig" else ""),
        ):
            span = where.values.get((table, number, word))
            if span is not None:
                begin, end = span
                found.append((begin, end, f'"{_text(value, _read(text[begin:end]))}"'))
                break
    for begin, end, written in sorted(found, reverse=True):
        text = text[:begin] + written + text[end:]
    return write_whole(path, text)


def _read(written: str) -> str:
    """The text of a TOML value, a string or a bare number."""
    return str(tomllib.loads(f"value = {written}")["value"])


def _text(value: Uncertain, written: str) -> str:
    """ "4.52e-12 m^3/Pa, u = 5.4e-14 m^3/Pa", in the unit of the written text."""
    found = _WRITTEN.match(written)
    word = found.group(1).strip() if found else ""
    if not word and found:
        # "4.00 ± 0.05 mm": the unit stands behind the tolerance
        tail = re.match(r"^\s*[\d.eE+-]+\s*([^,%]*)", found.group(2))
        word = tail.group(1).strip() if tail else ""
    size = unit(word)
    number = repr((value.value - size.offset) / size.factor)
    out = f"{number} {word}".strip()
    if math.isfinite(value.u) and value.u > 0:
        own = "K" if size.offset else word
        out += f", u = {value.u / (1.0 if size.offset else size.factor):.4g} {own}".rstrip()
    # a pressure is absolute inside: the ambient one is in it, and in its uncertainty
    return out + (", absolute" if re.search(r",\s*(absolute|gauge)", written) else "")
