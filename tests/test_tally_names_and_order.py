"""The names of the elements and their order in the rig file carry no physics: the tally must not see them."""

from __future__ import annotations

import re
import sys
from pathlib import Path

import pytest

import rigtally as rt
from rigtally.estimation.result import Fit
from rigtally.tallying.result import Tally

sys.path.insert(0, str(Path(__file__).parents[1] / "scripts"))

import shift_elements
from make_sample_data import preamble, write_csv

FOLDER = "impulse_line"
OWN = shift_elements.SAMPLES / FOLDER / "rig.toml"
OFF = ("oil.viscosity", "impulse line.bore", "gauge chamber.compliance")


@pytest.fixture(scope="module")
def fits(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Fit]:
    """A fit for each value that is off by 6 u."""
    rig = rt.load_rig(OWN)
    form = rt.predict(rig).form
    folder = tmp_path_factory.mktemp("off")
    out = {}
    for number, name in enumerate(OFF):
        log = folder / f"{number}.csv"
        write_csv(log, shift_elements.shifted(FOLDER, name), 700 + number, preamble(FOLDER, name, number))
        out[name] = rt.fit(
            rt.read(log), inputs="p_line", outputs="p_gauge", form=form, between="ramped", checks="none"
        )
    return out


def renamed_and_reordered(text: str) -> tuple[str, dict[str, str]]:
    """The rig file with other element names and all its tables but [rig] in reverse order."""
    head, *tables = re.split(r"(?m)^(?=\[)", text)
    names = re.findall(r'(?ms)^\[\[element\]\][^\[]*?^name\s*=\s*"([^"]+)"', text)
    new = {name: f"part {chr(ord('Z') - k)}" for k, name in enumerate(names)}
    first = [table for table in tables if table.startswith("[rig]")]
    rest = [table.rstrip("\n") + "\n\n" for table in reversed(tables) if table not in first]
    out = head + "".join([*first, *rest])
    for old, other in new.items():
        out = out.replace(f'"{old}"', f'"{other}"')
    return out, new


def group(found: Tally) -> set[frozenset[str]]:
    """What is named first, and what cannot be told apart from it; each as a set of values."""
    first = found.explanations[0]
    return {frozenset(first.elements), *(frozenset(text.split(" & ")) for text in first.indistinguishable)}


@pytest.mark.parametrize("name", OFF)
def test_other_names_and_another_order_change_nothing(
    name: str, fits: dict[str, Fit], tmp_path: Path
) -> None:
    """Verdict, joint distance (to 1e-6) and the group first named stay; the elements' new names appear in it."""
    text, new = renamed_and_reordered(OWN.read_text(encoding="utf-8"))
    assert len(new) == 2
    other = tmp_path / "other.toml"
    other.write_text(text, encoding="utf-8")
    rigs = [rt.load_rig(OWN), rt.load_rig(other)]
    one, two = (rt.tally(fits[name], rt.predict(rig), rig=rig) for rig in rigs)
    assert one.verdict == two.verdict == "differs"
    assert two.joint.chi2 == pytest.approx(one.joint.chi2, rel=1e-6)
    renamed = {
        frozenset(f"{new.get(owner, owner)}.{key}" for owner, _, key in (v.rpartition(".") for v in values))
        for values in group(one)
    }
    assert group(two) == renamed
