"""A measured frequency response as a table: frequency, and gain in one of three ways."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import LogError
from rigtally.quantities.units import dimension
from rigtally.records.column import Column
from rigtally.records.record import Provenance, Response
from rigtally.records.written_units import NO_UNIT, stated

Array = NDArray[np.float64]

_ROLES = {
    "frequency": r"f|freq\w*|frequenz|omega|ω|angular frequency",
    "magnitude": r"mag|magnitude|gain|amplitude ratio|abs|amplitude|\|[hg]\|",
    "phase": r"ph|phase|phase angle|arg|phi|φ",
    "real": r"re|real|real part",
    "imaginary": r"im|imag|imaginary|imaginary part",
    "coherence": r"coh|coherence|γ²|gamma2|γ2",
}
_U = re.compile(r"^(?:u[ _(]|uncertainty(?: of)?[ _(]|std[ _(]|sigma[ _(])(?P<of>.+?)\)?$")
_EXPANDED = re.compile(r"^(?:U[ _(]|expanded )(?P<of>.+?)\)?$")


@dataclass(frozen=True)
class _Roles:
    """Columns by what they are; `u` by whose uncertainty they are."""

    by: dict[str, Column]
    u: dict[str, Column]
    expanded: tuple[str, ...] = ()


def _role(name: str) -> str | None:
    bare = re.sub(r"[ _]+", " ", name.strip())
    bare = re.sub(r" (db|deg|rad|hz)$", "", bare, flags=re.IGNORECASE).lower()
    for role, pattern in _ROLES.items():
        if re.fullmatch(pattern, bare):
            return role
    return None


def _roles(columns: Sequence[Column]) -> _Roles:
    by: dict[str, Column] = {}
    u: dict[str, Column] = {}
    expanded: list[str] = []
    for column in columns:
        if column.kind != "number" or column.values is None:
            continue
        name = column.name.strip()
        big, small = _EXPANDED.match(name), _U.match(name)
        if big and _role(big.group("of")):
            expanded.append(column.name)
        elif small and (role := _role(small.group("of"))):
            u[role] = column
        elif role := _role(name):
            by.setdefault(role, column)
    return _Roles(by, u, tuple(expanded))


def is_response(columns: Sequence[Column]) -> bool:
    """Whether the columns are a frequency first, and a gain."""
    if not columns or _role(columns[0].name) != "frequency":
        return False
    found = _roles(columns).by
    return "magnitude" in found or ("real" in found and "imaginary" in found)


def to_response(columns: Sequence[Column], units: Mapping[str, str], provenance: Provenance) -> Response:
    """The response that the table states, in rad/s and SI units.

    Magnitude and phase (or gain in dB) become a complex gain; their standard uncertainties its covariance
    (first order, uncorrelated). Without a phase the gain is real and `magnitude_only` is set; its covariance
    then has NaN wherever the imaginary part enters.

    Raises
    ------
    LogError
        codes "no-unit", "unit-mismatch", "expanded-uncertainty", "no-numbers", "bad-frequency".
    """
    found = _roles(columns)
    file = provenance.file
    if found.expanded:
        raise LogError(
            f"the uncertainty {found.expanded[0]!r} is expanded, its coverage factor is not known",
            where=file,
            do="divide it by its coverage factor and name it u(…)",
            code="expanded-uncertainty",
        )
    frequency = _radians(found.by["frequency"], units, file)
    if not np.all(np.isfinite(frequency) & (frequency >= 0)):
        raise LogError(
            "a frequency is missing or negative",
            where=file,
            do="take the line out",
            code="bad-frequency",
        )
    order = np.argsort(frequency, kind="stable")
    if np.any(np.diff(frequency[order]) == 0):
        raise LogError("a frequency stands twice", where=file, do="keep one of them", code="bad-frequency")
    if "real" in found.by and "imaginary" in found.by:
        gain, covariance, unit, how = _cartesian(found, units, file)
    else:
        gain, covariance, unit, how = _polar(found, units, file)
    outputs, inputs = unit
    coherence = found.by["coherence"].values if "coherence" in found.by else None
    words = f"frequency response from {how}, frequency from column {found.by['frequency'].name!r}"
    return Response(
        frequency[order],
        gain[order].reshape(-1, 1, 1),
        None if covariance is None else covariance[order].reshape(-1, 1, 1, 2, 2),
        None if coherence is None else np.asarray(coherence)[order],
        output_units=(outputs,),
        input_units=(inputs,),
        magnitude_only="real" not in found.by and "phase" not in found.by,
        provenance=replace(provenance, how_read=(*provenance.how_read, words)),
    )


def _written(column: Column, units: Mapping[str, str], file: str, example: str) -> str:
    """The unit that the table or the caller states; none is refused."""
    suffix = re.search(r"[ _](dB|deg|rad|Hz)$", column.name)
    found = units.get(column.name, column.written or (suffix.group(1) if suffix else column.written))
    if found is None or (found.strip() == "" and column.name not in units):
        raise LogError(
            f"column {column.name!r} has no unit",
            where=file,
            do=f'state it, as --unit "{column.name}={example}"',
            code="no-unit",
        )
    return found.strip()


def _radians(column: Column, units: Mapping[str, str], file: str) -> Array:
    written = _written(column, units, file, "Hz")
    unit = stated(written, column.name, file)
    values = np.asarray(column.values, dtype=float)
    if unit.si == "rad/s":
        return values * unit.factor
    if unit.si in ("Hz", "1/s"):
        return values * unit.factor * 2.0 * math.pi
    raise LogError(
        f"the frequency is in {written!r}, {dimension(unit.si)}",
        where=file,
        do="state Hz or rad/s",
        code="unit-mismatch",
    )


def _ratio_unit(written: str, column: Column, file: str) -> tuple[float, tuple[str, str]]:
    """Factor to SI, and the units of output and input, of "mV/kPa" or "V/(m/s)"; "" of a plain ratio."""
    if written in NO_UNIT:
        return 1.0, ("", "")
    over = re.fullmatch(r"([^/()]+)/\(?(.+?)\)?", written)
    if over:
        top, bottom = stated(over.group(1), column.name, file), stated(over.group(2), column.name, file)
        return top.factor / bottom.factor, (top.si, bottom.si)
    unit = stated(written, column.name, file)
    return unit.factor, (unit.si, "")


def _cartesian(
    found: _Roles, units: Mapping[str, str], file: str
) -> tuple[NDArray[np.complex128], Array | None, tuple[str, str], str]:
    parts: list[Array] = []
    spreads: list[Array] = []
    ratio = ("", "")
    for role in ("real", "imaginary"):
        column = found.by[role]
        factor, unit = _ratio_unit(_written(column, units, file, "1"), column, file)
        if parts and unit != ratio:
            raise LogError(
                "real and imaginary part have different units",
                where=file,
                do="write both in one unit",
                code="unit-mismatch",
            )
        ratio = unit
        parts.append(np.asarray(column.values) * factor)
        if role in found.u:
            spreads.append(np.asarray(found.u[role].values) * factor)
    covariance = None
    if len(spreads) == 2:
        covariance = np.zeros((parts[0].size, 2, 2))
        covariance[:, 0, 0], covariance[:, 1, 1] = spreads[0] ** 2, spreads[1] ** 2
    return parts[0] + 1j * parts[1], covariance, ratio, "real and imaginary part"


def _polar(
    found: _Roles, units: Mapping[str, str], file: str
) -> tuple[NDArray[np.complex128], Array | None, tuple[str, str], str]:
    column = found.by["magnitude"]
    written = _written(column, units, file, "1")
    values = np.asarray(column.values, dtype=float)
    u = np.asarray(found.u["magnitude"].values, dtype=float) if "magnitude" in found.u else None
    decibel = re.fullmatch(r"dB(?:\s+re\s+(?:1\s*)?(?P<re>.+))?", written)
    if decibel:
        factor, ratio = _ratio_unit((decibel.group("re") or "1").strip(), column, file)
        magnitude = 10.0 ** (values / 20.0) * factor
        # d|G| = |G| ln(10)/20 dL
        u_magnitude = None if u is None else magnitude * math.log(10.0) / 20.0 * u
    else:
        factor, ratio = _ratio_unit(written, column, file)
        magnitude = values * factor
        u_magnitude = None if u is None else u * factor
    if np.any(magnitude < 0):
        raise LogError(
            "a magnitude is negative", where=file, do="state dB if it is a level", code="bad-magnitude"
        )
    how = "gain in dB" if decibel else "magnitude"
    if "phase" not in found.by:
        covariance = None
        if u_magnitude is not None:
            covariance = np.full((magnitude.size, 2, 2), np.nan)
            covariance[:, 0, 0] = u_magnitude**2
        return magnitude.astype(complex), covariance, ratio, f"{how} without phase"
    phase, u_phase = _phase(found, units, file)
    gain = magnitude * np.exp(1j * phase)
    covariance = None
    if u_magnitude is not None and u_phase is not None:
        cos, sin = np.cos(phase), np.sin(phase)
        along, across = u_magnitude**2, (magnitude * u_phase) ** 2
        covariance = np.empty((magnitude.size, 2, 2))
        covariance[:, 0, 0] = along * cos**2 + across * sin**2
        covariance[:, 1, 1] = along * sin**2 + across * cos**2
        covariance[:, 0, 1] = covariance[:, 1, 0] = (along - across) * sin * cos
    return gain, covariance, ratio, f"{how} and phase"


def _phase(found: _Roles, units: Mapping[str, str], file: str) -> tuple[Array, Array | None]:
    column = found.by["phase"]
    unit = stated(_written(column, units, file, "deg"), column.name, file)
    if unit.si != "rad":
        raise LogError(
            f"the phase is in {unit.written!r}", where=file, do="state deg or rad", code="unit-mismatch"
        )
    u = found.u.get("phase")
    spread = None if u is None else np.asarray(u.values, dtype=float) * unit.factor
    return np.asarray(column.values, dtype=float) * unit.factor, spread
