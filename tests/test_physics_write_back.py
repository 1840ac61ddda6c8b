"""A rig file written back: the new values, everything else as it was, and it reads again."""

from __future__ import annotations

from pathlib import Path

import pytest

from rigtally.cli.main import run
from rigtally.physics.rig_file import load_rig
from rigtally.physics.starter import starter, starter_kinds
from rigtally.physics.write_back import save_rig
from rigtally.quantities.uncertain import Uncertain

SAMPLES = Path(__file__).parents[1] / "sample_data"


@pytest.mark.parametrize("kind", starter_kinds())
def test_every_value_of_a_starter_is_written_back(kind: str, tmp_path: Path) -> None:
    """Each value moved by 1 %, with an uncertainty: the new file gives it back, and keeps its comments."""
    old = tmp_path / "old.toml"
    old.write_text(starter(kind), encoding="utf-8")
    rig = load_rig(old)
    moved = {
        name: Uncertain(q.value * 1.01, abs(q.value) * 0.002, q.unit)
        for name, q in rig.values.items()
        if not (name == "rig.gravity" or (q.distribution == "exact" and name not in rig.labels))
    }
    new = load_rig(save_rig(rig, moved, tmp_path / "new.toml"))
    for name, q in moved.items():
        assert new.values[name].value == pytest.approx(q.value, rel=1e-9), name
        assert new.values[name].u == pytest.approx(q.u, rel=1e-3), name
    comments = [line for line in rig.text.splitlines() if line.startswith("#")]
    assert [line for line in new.text.splitlines() if line.startswith("#")] == comments
    assert [e.name for e in new.elements] == [e.name for e in rig.elements]


def test_the_reconciled_rig_is_saved(tmp_path: Path) -> None:
    """`tally --save-rig`: the refilled line's compliance goes into the file, and the file predicts it."""
    folder = SAMPLES / "impulse_line"
    out = tmp_path / "reconciled.toml"
    log, rig = folder / "after_refill.csv", folder / "rig.toml"
    assert run(["tally", str(log), str(rig), "--quiet", "--save-rig", str(out)]) == 0
    before = load_rig(rig).values["gauge chamber.compliance"].value
    assert load_rig(out).values["gauge chamber.compliance"].value > 1.3 * before


@pytest.mark.parametrize("stated", ["2.0 bar ± 1 %, gauge", "3.0 bar, absolute, u = 0.01 bar"])
def test_static_pressure_is_written_back_as_it_is_used(stated: str, tmp_path: Path) -> None:
    """Gauge or absolute, the pressure that comes back is the one that was saved: no ambient pressure is added."""
    old = tmp_path / "old.toml"
    old.write_text(
        f'[rig]\nstatic_pressure = "{stated}"\nambient_pressure = "1.0 bar ± 10 mbar"\ntemperature = "23 °C"\n'
        '[medium.nitrogen]\n[[element]]\nname = "line"\nkind = "laminar-line"\nfrom = "a"\nto = "b"\n'
        'bore = "4 mm"\nlength = "3 m"\nmedium = "nitrogen"\n[[element]]\nname = "pot"\nkind = "chamber"\n'
        'at = "b"\nvolume = "20 cm^3"\nmedium = "nitrogen"\n[[drive]]\nname = "in"\nimposes = "pressure"\n'
        'at = "a"\n[[reading]]\nname = "out"\nof = "pressure"\nat = "b"\n',
        encoding="utf-8",
    )
    rig = load_rig(old)
    assert rig.values["rig.static_pressure"].value == pytest.approx(3.0e5, rel=1e-12)
    new_value = Uncertain(3.03e5, 900.0, "Pa")
    new = load_rig(save_rig(rig, {"rig.static_pressure": new_value}, tmp_path / "new.toml"))
    assert new.values["rig.static_pressure"].value == pytest.approx(3.03e5, rel=1e-9)
    assert new.values["rig.static_pressure"].u == pytest.approx(900.0, rel=1e-3)
