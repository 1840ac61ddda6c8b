"""One record in hundreds of written forms reads to one set of numbers, or is refused with both readings."""

from __future__ import annotations

import gzip
from pathlib import Path

import numpy as np
import pytest

import rigtally as rt
from log_forms import INTERVAL, ROWS, LogForm, forms, record
from rigtally.errors import LogError

FORMS = list(forms())
TRUTH = np.array(record())


def test_the_forms_are_many_and_few_are_ambiguous() -> None:
    """At least 300 files, at most 5 % of them named beforehand as ambiguous."""
    assert len({form.name for form in FORMS}) == len(FORMS) >= 300
    assert 0 < sum(form.ambiguous for form in FORMS) <= 0.05 * len(FORMS)


@pytest.mark.parametrize("form", FORMS, ids=lambda form: form.name)
def test_every_form_reads_to_the_same_numbers(form: LogForm, tmp_path: Path) -> None:
    """Each form gives the record's numbers, names, units and clock, or the refusal named beforehand."""
    path = tmp_path / "log.csv"
    path.write_bytes(form.bytes())
    if form.ambiguous:
        with pytest.raises(LogError) as refusal:
            rt.read(path)
        assert refusal.value.code == "ambiguous"
        assert "(commas between columns)" in refusal.value.what and "(decimal commas)" in refusal.value.what
        return
    found = rt.read(path)
    assert found.names == ("p", "n", "T")
    assert [channel.unit_known for channel in found.channels] == [True] * 3
    assert (found.channels[0].unit, found.channels[2].unit) == ("Pa", "K")
    for column, channel in zip(TRUTH.T[1:], found.channels, strict=True):
        np.testing.assert_array_equal(channel.samples, column * channel.factor + channel.offset)
    assert found.count == ROWS
    assert found.interval == pytest.approx(INTERVAL, rel=1e-9)
    assert not found.clock_faults
    assert len(found.provenance.how_read) == 2


def test_sixteen_encodings_give_one_record(tmp_path: Path) -> None:
    """The same text in every encoding (and packed) has identical samples and clock."""
    text = LogForm(";", ",", "", "utf-8", "unit-row", "seconds").text()
    plain = {
        "utf-8": text.encode(),
        "utf-8-sig": text.encode("utf-8-sig"),
        "utf-16": text.encode("utf-16"),
        "utf-16-le": text.encode("utf-16-le"),
        "utf-16-be": text.encode("utf-16-be"),
        "utf-16-be-mark": b"\xfe\xff" + text.encode("utf-16-be"),
        "utf-32": text.encode("utf-32"),
        "cp1252": text.encode("cp1252"),
        "latin-1": text.encode("latin-1"),
        "crlf": text.replace("\n", "\r\n").encode(),
        "cr": text.replace("\n", "\r").encode(),
        "no-last-end": text.rstrip("\n").encode(),
        "control-z": text.encode() + b"\x1a",
    }
    packed = {f"{key}.gz": gzip.compress(plain[key]) for key in ("utf-8", "utf-16", "cp1252")}
    every = plain | packed
    assert len(every) >= 14
    stated = {"cp850": text.encode("cp850"), "mac-roman": text.encode("mac-roman")}
    reference = None
    for name, content in (every | stated).items():
        path = tmp_path / f"log-{name}"
        path.write_bytes(content)
        found = rt.read(path, encoding=name if name in stated else None)
        samples = np.array([channel.samples for channel in found.channels])
        reference = samples if reference is None else reference
        np.testing.assert_array_equal(samples, reference)
        assert (found.start, found.interval) == (0.0, INTERVAL)
        assert [channel.written_unit for channel in found.channels] == ["kPa", "rpm", "°C"]
