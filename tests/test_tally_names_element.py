"""The whole road from a log to the element that is off: the sample rigs, integrated apart from rigtally."""

from __future__ import annotations

import sys
from pathlib import Path

import pytest

import rigtally as rt
from rigtally.cli.logs import rig_channels
from rigtally.tallying.result import Tally

sys.path.insert(0, str(Path(__file__).parents[1] / "scripts"))

import shift_elements
from make_sample_data import preamble, write_semicolons


def tallied(folder: str, name: str, steps: float, path: Path, seed: int) -> Tally:
    """Log the shifted rig, read the log back, fit, predict, tally."""
    write_semicolons(path, shift_elements.shifted(folder, name, steps), seed, preamble(folder, name, seed))
    rig = rt.load_rig(shift_elements.SAMPLES / folder / "rig.toml")
    prediction = rt.predict(rig)
    record = rt.read(path)
    inputs, outputs = rig_channels(rig, record)
    fit = rt.fit(record, inputs=inputs, outputs=outputs, form=prediction.form, between="ramped", checks="none")
    return rt.tally(fit, prediction, rig=rig)


@pytest.mark.parametrize(
    ("folder", "name", "steps"),
    [(*case, 6.0) for case in shift_elements.CASES]
    + [(*case, -6.0) for case in shift_elements.CASES if case[0] == "impulse_line"],
)
def test_the_group_first_named_contains_the_value(folder: str, name: str, steps: float, tmp_path: Path) -> None:
    """A value off by 6 u stands in the group that the tally names first, and the group moves its way."""
    found = tallied(folder, name, steps, tmp_path / "log.csv", 500 + shift_elements.CASES.index((folder, name)))
    first = found.explanations[0]
    assert name in (*first.elements, *first.indistinguishable)
    if first.elements == (name,) and found.verdict == "differs":
        assert first.in_u[0] * steps > 0
        assert abs(first.in_u[0] - steps) < 3.0


def test_after_the_refill_the_chamber_is_named() -> None:
    """The careless refill does not tally, the chamber's compliance is named, and it has gone up."""
    folder = shift_elements.SAMPLES / "impulse_line"
    rig = rt.load_rig(folder / "rig.toml")
    prediction = rt.predict(rig)
    verdicts = {}
    for log in sorted(folder.glob("*.csv")):
        record = rt.read(log)
        inputs, outputs = rig_channels(rig, record)
        fit = rt.fit(record, inputs=inputs, outputs=outputs, form=prediction.form, checks="none")
        verdicts[log.stem] = rt.tally(fit, prediction, rig=rig)
    bad = verdicts.pop("after_refill")
    assert {found.verdict for found in verdicts.values()} == {"agrees"}
    assert bad.verdict == "differs"
    assert bad.explanations[0].elements == ("gauge chamber.compliance",)
    assert bad.explanations[0].change[0] > 0.3
