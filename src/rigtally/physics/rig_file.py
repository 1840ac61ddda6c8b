"""The door to rig files: read, check, and hand over a `Rig` in SI.

Every fault names the file, the line, the table and the key, and says what to do.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from rigtally.physics.kinds import DOMAIN_OF, KINDS, SAME
from rigtally.physics.rig import GROUND, Drive, Element, Port, Reading, Rig
from rigtally.physics.rig_elements import Parts
from rigtally.physics.rig_nodes import check_nodes
from rigtally.physics.rig_options import read_agreement, read_fit, read_limits, read_log, read_systematic
from rigtally.physics.rig_source import Source, nearest
from rigtally.physics.spoken import WORDS
from rigtally.quantities.uncertain import Uncertain

_TABLES = (
    "rig",
    "medium",
    "value",
    "element",
    "drive",
    "reading",
    "log",
    "fit",
    "agreement",
    "limits",
    "systematic",
)
STANDARD_ATMOSPHERE = 101325.0  # Pa, exact by definition
_REFERENCE = re.compile(r",\s*(absolute|gauge)\s*(?=,|$)")


def load_rig(path: str | Path) -> Rig:
    """Read and check a rig file.

    Parameters
    ----------
    path : str or Path
        A TOML file as the rig file's page describes it.

    Returns
    -------
    Rig
        All values in SI, each once; nodes, domains, names and units checked. A file with [limits] and no
        element is a rating to confirm.

    Raises
    ------
    RigError
        With file, line, table, key and what to do.
    """
    source = Source(path)
    for name in source.tree:
        if name not in _TABLES:
            raise source.fault(
                f"a table {name!r} is not known", table=name, do=nearest(name, list(_TABLES)),
                code="unknown-table",
            )  # fmt: skip
    settings = _settings(source)
    parts = Parts(source, settings)
    elements = parts.elements()
    drives = _drives(source, parts)
    readings = _readings(source, parts, elements, drives)
    parts.check_shared()
    limits = read_limits(source)
    _check_whole(source, elements, drives, readings, limits)
    check_nodes(source, elements, drives, readings)
    return Rig(
        title=source.text_of(source.tree.get("rig", {}), "title", table="rig", need=False) or Path(path).stem,
        elements=elements,
        drives=drives,
        readings=readings,
        values=parts.values,
        labels=parts.labels,
        media=parts.media,
        log=read_log(source),
        fit=read_fit(source),
        agreement=read_agreement(source),
        limits=limits,
        systematic=read_systematic(source),
        settings=settings,
        file=source.file,
        sha256=source.sha256,
        text=source.text,
    )


def _settings(source: Source) -> dict[str, Any]:
    """[rig]: title, gravity, temperature, static pressure (absolute, Pa)."""
    entry = source.tree.get("rig", {})
    if not isinstance(entry, dict):
        raise source.fault("rig is not a table", table="rig", do="write [rig]", code="bad-table")
    allowed = ("title", "gravity", "temperature", "static_pressure", "ambient_pressure")
    source.only_keys(entry, allowed, table="rig")
    out: dict[str, Any] = {}
    if "gravity" in entry:
        out["gravity"] = source.quantity(entry["gravity"], "m/s^2", table="rig", key="gravity")
    if "temperature" in entry:
        out["temperature"] = source.quantity(entry["temperature"], "K", table="rig", key="temperature")
    ambient = Uncertain(STANDARD_ATMOSPHERE, 0.0, "Pa", distribution="exact")
    if "ambient_pressure" in entry:
        ambient = source.quantity(entry["ambient_pressure"], "Pa", table="rig", key="ambient_pressure")
    if "static_pressure" in entry:
        out["static_pressure"] = _static_pressure(source, entry, ambient)
    return out


def _static_pressure(source: Source, entry: Mapping[str, Any], ambient: Uncertain) -> Uncertain:
    written = entry["static_pressure"]
    found = _REFERENCE.search(written) if isinstance(written, str) else None
    if found is None:
        raise source.fault(
            f"static_pressure = {written!r} does not say against what",
            table="rig",
            key="static_pressure",
            do='write "2.0 bar, absolute" or "1.0 bar, gauge"',
            code="which-pressure",
        )
    plain = written[: found.start()] + written[found.end() :]
    absolute = found.group(1) == "absolute"
    value = source.quantity(plain, "Pa", table="rig", key="static_pressure", positive=absolute)
    if absolute:
        return value
    if "ambient_pressure" not in entry:
        raise source.fault(
            "a gauge pressure needs ambient_pressure",
            table="rig",
            key="static_pressure",
            do='write ambient_pressure = "1013 mbar ± 20 mbar" in [rig]',
            code="missing-pressure",
        )
    u = (value.u**2 + ambient.u**2) ** 0.5
    return Uncertain(value.value + ambient.value, u, "Pa")


def _place(source: Source, entry: Mapping[str, Any], at: dict[str, Any]) -> tuple[Port, bool]:
    """(port, written as `at`) of a drive or a reading."""
    if "at" in entry:
        if "from" in entry or "to" in entry:
            raise source.fault(
                "at stands beside from or to", key="at", do="at is short for from = …, to = ground; use one",
                code="bad-place", **at,
            )  # fmt: skip
        node = source.text_of(entry, "at", **at)
        if node == GROUND:
            raise source.fault("at is ground", key="at", do="name a node of the rig", code="same-node", **at)
        return Port(node), True
    if "from" not in entry:
        raise source.fault(
            "its place is missing", do='write at = "node", or from and to', code="missing-node", **at
        )
    first = source.text_of(entry, "from", **at)
    second = source.text_of(entry, "to", need=False, **at) or GROUND
    if first == second:
        raise source.fault(
            f"from and to are the same node {first!r}", key="to", do="name two different nodes",
            code="same-node", **at,
        )  # fmt: skip
    return Port(first, second), False


def _entries(source: Source, table: str) -> list[Mapping[str, Any]]:
    found = source.tree.get(table, [])
    if not isinstance(found, list) or not all(isinstance(e, dict) for e in found):
        raise source.fault(
            f"{table} is not a list of tables", table=table, do=f"write [[{table}]]", code="bad-table"
        )
    return list(found)


def _drives(source: Source, parts: Parts) -> tuple[Drive, ...]:
    out: list[Drive] = []
    imposed = [word for word in WORDS if "acceleration" not in word] + ["acceleration"]
    for number, entry in enumerate(_entries(source, "drive")):
        at: dict[str, Any] = {"table": "drive", "number": number}
        name = source.text_of(entry, "name", **at)
        at["name"] = name
        keys = ("name", "imposes", "at", "from", "to", "channel", "known", "between", "medium")
        source.only_keys(entry, keys, **at)
        if name in {drive.name for drive in out}:
            raise source.fault(
                f"the name {name!r} is given twice", key="name", do="give each drive a name of its own",
                code="doubled-name", **at,
            )  # fmt: skip
        word = source.text_of(entry, "imposes", **at)
        source.one_of(word, imposed, key="imposes", code="unknown-quantity", **at)
        port, short = _place(source, entry, at)
        known = source.one_of(
            str(entry.get("known", "measured")),
            ("measured", "commanded"),
            key="known",
            code="unknown-word",
            **at,
        )
        between = source.one_of(
            str(entry.get("between", "ramped" if known == "measured" else "held")),
            ("held", "ramped", "band-limited"), key="between", code="unknown-word", **at,
        )  # fmt: skip
        medium = _level_medium(source, parts, entry, word, at)
        channel = source.text_of(entry, "channel", need=False, **at)
        line = source.lines.table("drive", number)
        out.append(Drive(name, word, port, channel, known, between, medium, WORDS[word].unit, line, short))
    return tuple(out)


def _readings(
    source: Source, parts: Parts, elements: Sequence[Element], drives: Sequence[Drive]
) -> tuple[Reading, ...]:
    flows = _flows(elements, drives)
    out: list[Reading] = []
    for number, entry in enumerate(_entries(source, "reading")):
        at: dict[str, Any] = {"table": "reading", "number": number}
        name = source.text_of(entry, "name", **at)
        at["name"] = name
        source.only_keys(entry, ("name", "of", "at", "from", "to", "through", "channel", "medium"), **at)
        if name in {reading.name for reading in out}:
            raise source.fault(
                f"the name {name!r} is given twice", key="name", do="give each reading a name of its own",
                code="doubled-name", **at,
            )  # fmt: skip
        word = source.text_of(entry, "of", **at)
        source.one_of(word, WORDS, key="of", code="unknown-quantity", **at)
        channel = source.text_of(entry, "channel", need=False, **at)
        line = source.lines.table("reading", number)
        unit = WORDS[word].unit
        if not WORDS[word].across:
            through = source.text_of(entry, "through", **at)
            source.one_of(through, sorted(flows), key="through", code="unknown-element", **at)
            _check_through(source, through, word, flows[through], at)
            out.append(Reading(name, word, None, through, channel, "", unit, line))
            continue
        if "through" in entry:
            raise source.fault(
                f"{word} is read between nodes, not through an element", key="through",
                do='write at = "node", or from and to', code="bad-place", **at,
            )  # fmt: skip
        port, _ = _place(source, entry, at)
        medium = _level_medium(source, parts, entry, word, at)
        out.append(Reading(name, word, port, "", channel, medium, unit, line))
    return tuple(out)


def _flows(elements: Sequence[Element], drives: Sequence[Drive]) -> dict[str, list[str]]:
    """What can be read through: the domains of the elements (at a coupler's primary) and drives of a name."""
    out: dict[str, list[str]] = {}
    for element in elements:
        out.setdefault(element.name, []).append(KINDS[element.kind].domains[0])
    for drive in drives:
        out.setdefault(drive.name, []).append(DOMAIN_OF[drive.imposes])
    return out


def _check_through(
    source: Source, through: str, word: str, domains: Sequence[str], at: dict[str, Any]
) -> None:
    if len(domains) > 1:
        raise source.fault(
            f"through = {through!r} is the name of an element and of a drive", key="through",
            do="give one of them another name", code="doubled-name", **at,
        )  # fmt: skip
    if domains[0] not in (DOMAIN_OF[word], SAME):
        raise source.fault(
            f"no {word} goes through {through!r}, which is {domains[0]}", key="of",
            do="read " + " or ".join(w for w, s in WORDS.items() if not s.across and DOMAIN_OF[w] == domains[0]),
            code="two-domains", **at,
        )  # fmt: skip


def _level_medium(
    source: Source, parts: Parts, entry: Mapping[str, Any], word: str, at: dict[str, Any]
) -> str:
    """The medium of a level, its density made sure of."""
    medium = source.text_of(entry, "medium", need=False, **at)
    if medium and word != "level":
        raise source.fault(
            f"a medium has no meaning for {word}", key="medium", do="take it out", code="unknown-key", **at
        )
    if medium:
        parts.use_medium(medium, ("density",), at)
    return medium


def _check_whole(source: Source, elements: Any, drives: Any, readings: Any, limits: Any) -> None:
    """A rig has elements, a drive and a reading; a rating to confirm has limits alone."""
    if not elements and limits and not drives and not readings:
        return
    for table, found in (("element", elements), ("drive", drives), ("reading", readings)):
        if not found:
            raise source.whole(
                f"the rig has no [[{table}]]",
                do="add one; `rigtally starter` shows how (a file with [limits] alone confirms a rating)",
                code=f"no-{table}",
            )
