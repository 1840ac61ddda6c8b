"""[log], [fit], [agreement], [limits] and [[systematic]]: what is not the rig itself."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from typing import Any

from rigtally.errors import UsageError
from rigtally.physics.rig_source import Source, nearest
from rigtally.quantities import units
from rigtally.quantities.tolerance import read_quantity
from rigtally.quantities.uncertain import Uncertain

_PARAMETER = re.compile(
    r"^(gain|natural_frequency|damping_ratio|time_constant|zero_time|dead_time)(_\d+)?(\(.+\))?$"
)
_UNIT = {
    "natural_frequency": "rad/s",
    "damping_ratio": "",
    "time_constant": "s",
    "zero_time": "s",
    "dead_time": "s",
}
_RANGE = re.compile(r"^(.+?)\s+to\s+(.+)$")
_ABOVE = re.compile(r"^(>=|<=|≥|≤)\s*(.+)$")
_NUMBER = r"(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?"
_WITHIN = re.compile(rf"^(.+?)\s+within\s+({_NUMBER})\s*%$")
_PERCENT = re.compile(rf"^\s*({_NUMBER})\s*%\s*$")
_LEADING = re.compile(rf"^\s*[+-]?{_NUMBER}\s*")


def _table(source: Source, name: str) -> Mapping[str, Any]:
    entry = source.tree.get(name, {})
    if not isinstance(entry, dict):
        raise source.fault(f"{name} is not a table", table=name, do=f"write [{name}]", code="bad-table")
    return entry


def read_log(source: Source) -> dict[str, Any]:
    """time, rate, units and skew of the log."""
    entry = _table(source, "log")
    source.only_keys(entry, ("time", "rate", "units", "skew"), table="log")
    out: dict[str, Any] = {}
    if "time" in entry:
        out["time"] = source.text_of(entry, "time", table="log")
    if "rate" in entry:
        source.quantity(entry["rate"], "Hz", table="log", key="rate")
        out["rate"] = entry["rate"]
    stated = entry.get("units", {})
    if not isinstance(stated, dict):
        raise source.fault("units is not a table", table="log", key="units", do='write units = { p = "kPa" }',
                           code="bad-table")  # fmt: skip
    for channel, word in stated.items():
        try:
            units.unit(str(word))
        except UsageError as fault:
            raise source.fault(
                fault.what, table="log", key=f"units.{channel}", do=fault.do, code=fault.code
            ) from None
    if stated:
        out["units"] = {str(k): str(v) for k, v in stated.items()}
    skew = entry.get("skew", {})
    if not isinstance(skew, dict):
        raise source.fault("skew is not a table", table="log", key="skew", do='write skew = { p = "12 µs" }',
                           code="bad-table")  # fmt: skip
    if skew:
        out["skew"] = {
            str(k): source.quantity(v, "s", table="log", key=f"skew.{k}", positive=False)
            for k, v in skew.items()
        }
    return out


def read_fit(source: Source) -> dict[str, Any]:
    """form and dead_time."""
    entry = _table(source, "fit")
    source.only_keys(entry, ("form", "dead_time"), table="fit")
    if not isinstance(entry.get("dead_time", False), bool):
        raise source.fault(
            f"dead_time = {entry['dead_time']!r} is neither true nor false",
            table="fit", key="dead_time", do="write dead_time = true", code="bad-value",
        )  # fmt: skip
    if "form" in entry and entry["form"] != "from-rig":
        from rigtally.forms.named import form

        try:
            form(str(entry["form"]))
        except UsageError as fault:
            raise source.fault(fault.what, table="fit", key="form", do=fault.do, code=fault.code) from None
    return dict(entry)


def read_agreement(source: Source) -> dict[str, Any]:
    """coverage, rule, and within as relative half-widths."""
    entry = _table(source, "agreement")
    source.only_keys(entry, ("coverage", "rule", "within"), table="agreement")
    out: dict[str, Any] = {}
    if "coverage" in entry:
        value = entry["coverage"]
        if isinstance(value, bool) or not isinstance(value, int | float) or not 0.5 <= value < 1.0:
            raise source.fault(
                f"coverage = {value!r} is not a probability from 0.5 to 1", table="agreement", key="coverage",
                do="write coverage = 0.95", code="bad-value",
            )  # fmt: skip
        out["coverage"] = float(value)
    if "rule" in entry:
        out["rule"] = source.one_of(
            str(entry["rule"]), ("simple", "guarded"), table="agreement", key="rule", code="unknown-word"
        )
    within = entry.get("within", {})
    if not isinstance(within, dict):
        raise source.fault("within is not a table", table="agreement", key="within",
                           do='write within = { gain = "2 %" }', code="bad-table")  # fmt: skip
    for name, text in within.items():
        _known(source, name, "agreement", f"within.{name}")
        found = _PERCENT.match(str(text))
        if not found or not 0 < float(found.group(1)) < math.inf:
            raise source.fault(
                f"within {name} = {text!r} is not a percentage", table="agreement", key=f"within.{name}",
                do=f'write {name} = "5 %"', code="bad-value",
            )  # fmt: skip
        out.setdefault("within", {})[name] = float(found.group(1)) / 100.0
    if out.get("rule") == "guarded" and not out.get("within") and not source.tree.get("limits"):
        raise source.fault(
            'rule = "guarded" needs `within` or [limits]', table="agreement", key="rule",
            do="state what difference matters, or take the rule out", code="rule-without-limits",
        )  # fmt: skip
    return out


def _known(source: Source, name: str, table: str, key: str) -> None:
    if not _PARAMETER.match(name):
        raise source.fault(
            f"{name!r} is not a parameter", table=table, key=key,
            do=nearest(name, ["gain", *_UNIT]),
            code="unknown-parameter",
        )  # fmt: skip


def read_limits(source: Source) -> dict[str, tuple[float | None, float | None, str]]:
    """Parameter -> (lower, upper, unit) in SI; an open side is None."""
    out: dict[str, tuple[float | None, float | None, str]] = {}
    for name, text in _table(source, "limits").items():
        _known(source, name, "limits", name)
        base = re.sub(r"(_\d+)?(\(.+\))?$", "", name) if not name.startswith("gain") else "gain"
        try:
            out[name] = _limit(str(text), base)
        except UsageError as fault:
            raise source.fault(fault.what, table="limits", key=name, do=fault.do, code=fault.code) from None
    return out


def _limit(text: str, base: str) -> tuple[float | None, float | None, str]:
    """One limit: ">= 120 Hz", "0.6 to 0.8", "2.00 mV/kPa within 1 %"."""
    one_sided, within, between = _ABOVE.match(text), _WITHIN.match(text), _RANGE.match(text)
    if one_sided:
        value = _plain(one_sided.group(2), base)
        unit = value.unit
        return (value.value, None, unit) if one_sided.group(1) in (">=", "≥") else (None, value.value, unit)
    if within:
        value = _plain(within.group(1), base)
        half = abs(value.value) * float(within.group(2)) / 100.0
        return value.value - half, value.value + half, value.unit
    if between:
        high = _plain(between.group(2), base)
        first = between.group(1).strip()
        if not _word(first):
            first = f"{first} {_word(between.group(2))}"
        low = _plain(first, base)
        if low.unit != high.unit:
            raise UsageError(
                f"{text!r} has limits of two kinds", do="write both in one unit", code="wrong-unit"
            )
        if not low.value < high.value:
            raise UsageError(f"{text!r} runs downwards", do="write the lower limit first", code="bad-value")
        return low.value, high.value, high.unit
    raise UsageError(
        f"{text!r} is not a limit", do='write ">= 120 Hz", "0.6 to 0.8" or "2.00 mV/kPa within 1 %"',
        code="bad-value",
    )  # fmt: skip


def _word(text: str) -> str:
    """The unit of a written number."""
    return _LEADING.sub("", text).strip()


def _plain(text: str, base: str) -> Uncertain:
    """A number with its unit; a frequency in Hz is turned into rad/s."""
    if base == "gain":
        found = _LEADING.match(text)
        if not found:
            raise UsageError(f"{text!r} is not a value", do='write "2.00 mV/kPa"', code="bad-value")
        unit = units.unit(_word(text))
        value = Uncertain(float(found.group()) * unit.factor, 0.0, unit.si)
    elif base == "natural_frequency" and re.search(r"Hz|hertz", _word(text)):
        turns = read_quantity(text, "Hz", key=base)
        value = Uncertain(2.0 * math.pi * turns.value, turns.u, "rad/s")
    else:
        value = read_quantity(text, _UNIT[base], key=base)
    if not math.isfinite(value.value):
        raise UsageError(f"{text!r} is not finite", do="write a finite limit", code="bad-value")
    if value.u > 0.0:
        raise UsageError(
            f"{text!r} states an uncertainty", do="a limit has none; write the limit alone", code="bad-value"
        )
    return value


def read_systematic(source: Source) -> tuple[dict[str, Any], ...]:
    """Type B contributions, relative on a gain or on time."""
    entries = source.tree.get("systematic", [])
    if not isinstance(entries, list) or not all(isinstance(entry, dict) for entry in entries):
        raise source.fault("systematic is not a list of tables", table="systematic", do="write [[systematic]]",
                           code="bad-table")  # fmt: skip
    out = []
    for number, entry in enumerate(entries):
        at: dict[str, Any] = {"table": "systematic", "number": number}
        source.only_keys(entry, ("of", "channel", "value", "source"), **at)
        of = source.text_of(entry, "of", **at)
        source.one_of(of, ("gain", "time"), key="of", code="unknown-word", **at)
        if "value" not in entry:
            raise source.fault("value is missing", do='write value = "0 ± 0.3 %"', code="missing-key", **at)
        value = source.quantity(entry["value"], "", key="value", positive=False, **at)
        channel = source.text_of(entry, "channel", need=of == "gain", **at)
        out.append({"of": of, "channel": channel, "value": value, "source": str(entry.get("source", ""))})
    return tuple(out)
