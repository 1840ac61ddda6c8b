"""What a report says, on the terminal and on the page, for results that tally and for results that do not."""

from __future__ import annotations

import io
import math
from pathlib import Path

import numpy as np
import pytest
from rich.console import Console

import rigtally as rt
from rigtally.cli.logs import rig_channels
from rigtally.errors import UsageError
from rigtally.reporting.network_picture import network_picture
from rigtally.reporting.plots import POINTS, envelope
from rigtally.reporting.terminal import render
from rigtally.tallying.result import Tally

FOLDER = Path(__file__).parents[1] / "sample_data" / "impulse_line"


@pytest.fixture(scope="module")
def refill() -> Tally:
    """The log after the careless refill, tallied."""
    rig = rt.load_rig(FOLDER / "rig.toml")
    prediction = rt.predict(rig)
    record = rt.read(FOLDER / "after_refill.csv")
    inputs, outputs = rig_channels(rig, record)
    fit = rt.fit(record, inputs=inputs, outputs=outputs, form=prediction.form, checks="none")
    return rt.tally(fit, prediction, rig=rig)


def text_of(result: object, width: int = 120) -> str:
    stream = io.StringIO()
    render(result, Console(file=stream, width=width, highlight=False))
    return stream.getvalue()


def test_terminal_begins_with_the_verdict(refill: Tally) -> None:
    """The first line is the verdict; the element stands before the notes; the caution is there."""
    text = text_of(refill)
    assert text.startswith("Bench and model differ.")
    assert text.index("gauge chamber.compliance +") < text.index("explains")
    assert "local codes" in text


def test_the_page_says_what_the_result_holds(refill: Tally, tmp_path: Path) -> None:
    """Every compared parameter, the explanation, the hash of the log and of the rig file; nothing from outside."""
    page = rt.report(refill, tmp_path / "refill.html", rig=rt.load_rig(FOLDER / "rig.toml"))
    text = page.read_text(encoding="utf-8")
    assert 'class="verdict differs"' in text
    for name in ("gain K", "natural frequency ωn", "damping ratio ζ", "gauge chamber.compliance", "trapped gas"):
        assert name in text
    assert refill.fit.log["sha256"] in text
    assert str(refill.prediction.provenance["sha256"]) in text
    assert "<script" not in text
    assert "http://" not in text.replace("http://www.w3.org", "").replace("http://purl.org", "").replace(
        "http://creativecommons.org", ""
    )


def test_the_same_result_makes_the_same_page(refill: Tally, tmp_path: Path) -> None:
    """A report carries no date and no random name: two of one result are equal byte by byte."""
    first, second = (rt.report(refill, tmp_path / f"{k}.html").read_bytes() for k in range(2))
    assert first == second


def test_names_from_a_log_are_only_text(refill: Tally, tmp_path: Path) -> None:
    """A title with markup is shown as written, on the page and on the terminal."""
    from dataclasses import replace

    wild = replace(refill, prediction=replace(refill.prediction, title="<img src=x> [red]bench[/]"))
    text = rt.report(wild, tmp_path / "wild.html").read_text(encoding="utf-8")
    assert "<img" not in text
    assert "&lt;img src=x&gt;" in text
    assert "[red]bench[/]" in text_of(wild)


def test_what_has_no_page_is_refused(tmp_path: Path) -> None:
    """Refused by name, and no file is left behind."""
    with pytest.raises(UsageError, match="no report of a dict"):
        rt.report({}, tmp_path / "none.html")
    assert not list(tmp_path.iterdir())


def test_the_envelope_keeps_every_extreme() -> None:
    """A spike of one sample survives decimation, and holes stay holes."""
    time = np.arange(100_000) * 1e-3
    values = np.sin(time)
    values[51_234] = 40.0
    values[7_000:9_000] = math.nan
    t, v = envelope(time, values)
    assert t.size <= 1.2 * POINTS
    assert np.nanmax(v) == 40.0
    assert np.all(np.diff(t) > 0)
    assert np.isnan(v[(t > 7.2) & (t < 8.8)]).all()


@pytest.mark.parametrize("rig", sorted(FOLDER.parent.glob("*/rig.toml")), ids=lambda p: p.parent.name)
def test_the_picture_names_everything(rig: Path) -> None:
    """Every element, node, drive and reading of the rig stands in its picture."""
    found = rt.load_rig(rig)
    picture = network_picture(found)
    nodes = {n for e in found.elements for p in e.ports for n in (p.first, p.second)}
    for name in [*(e.name for e in found.elements), *(d.name for d in found.drives),
                 *(r.name for r in found.readings), *nodes]:  # fmt: skip
        assert f">{name}<" in picture
