"""Broken rig files: each is refused with the exact line, which names file, line, table and key."""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path

import pytest

from rigtally.cli.main import run
from rigtally.errors import RigError
from rigtally.physics.rig_file import load_rig

WHOLE = """\
[rig]
title = "Impulse line"

[medium.oil]
density   = "871 kg/m^3 ± 0.5 %"
viscosity = "0.0296 Pa*s, u = 0.0006 Pa*s"

[[element]]
name   = "impulse line"
kind   = "laminar-line"
from   = "tapping"
to     = "gauge"
bore   = "4.00 mm ± 0.05 mm"
length = "3.20 m ± 0.01 m"
medium = "oil"

[[element]]
name       = "gauge chamber"
kind       = "chamber"
at         = "gauge"
compliance = "3.1e-12 m^3/Pa ± 8 %"

[[drive]]
name    = "line pressure"
imposes = "pressure"
at      = "tapping"
channel = "p_line"

[[reading]]
name    = "gauge pressure"
of      = "pressure"
at      = "gauge"
channel = "p_gauge"
"""
TABLE = Path(__file__).with_name("rig_faults.txt")


@dataclass(frozen=True)
class Fault:
    """One broken file: its text, and what must be said."""

    name: str
    code: str
    text: str
    printed: str
    stands: str


def faults() -> list[Fault]:
    """The table, each entry as the file it makes."""
    found = []
    for entry in TABLE.read_text(encoding="utf-8").split("\n= ")[1:]:
        head, *rest = entry.split("\n")
        name, code = head.split()
        lines: list[str] = WHOLE.split("\n")
        out, at = list(lines), 0
        shift = 0
        printed = stands = ""
        for row in rest:
            sign, told = row[:1], row[2:]
            if sign == "@":
                at = int(told) - 1 + shift
            elif sign == "-":
                if out[at] != told:
                    raise ValueError(f"{name}: {told!r} is not what stands there")
                del out[at]
                shift -= 1
            elif sign == "+":
                out.insert(at, told)
                at, shift = at + 1, shift + 1
            elif sign == ">":
                printed = told
            elif sign == "|":
                stands = told
        found.append(Fault(name, code, "\n".join(out), printed, stands))
    return found


FAULTS = faults()


def refusal(text: str, monkeypatch: pytest.MonkeyPatch, folder: Path) -> RigError:
    monkeypatch.chdir(folder)
    Path("rig.toml").write_text(text, encoding="utf-8")
    with pytest.raises(RigError) as caught:
        load_rig("rig.toml")
    return caught.value


def test_the_whole_file_is_sound(tmp_path: Path) -> None:
    """Without its fault the file of the table is read: each refusal is of its fault alone."""
    file = tmp_path / "rig.toml"
    file.write_text(WHOLE, encoding="utf-8")
    assert [e.name for e in load_rig(file).elements] == ["impulse line", "gauge chamber"]
    assert len(FAULTS) > 100
    assert len({fault.name for fault in FAULTS}) == len(FAULTS)


@pytest.mark.parametrize("fault", FAULTS, ids=lambda fault: fault.name)
def test_fault_is_told_with_its_line(fault: Fault, monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """The exact line, and the file has at that line what the table says."""
    told = refusal(fault.text, monkeypatch, tmp_path)
    assert (told.code, told.line()) == (fault.code, fault.printed)
    line = int(fault.printed.split(":")[1])
    assert fault.text.split("\n")[line - 1].rstrip() == fault.stands
    assert told.do


@pytest.mark.parametrize("ends", ["\n", "\r\n"], ids=["lf", "crlf"])
@pytest.mark.parametrize("fault", FAULTS, ids=lambda fault: fault.name)
def test_line_follows_comments(
    fault: Fault, ends: str, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    """Below 20 comment lines (with brackets, signs and quotes in them) the line is 20 further, nothing else."""
    note = '# [[element]] bore = "4 mm" { [ """\n' * 20
    told = refusal((note + fault.text).replace("\n", ends), monkeypatch, tmp_path)
    line = int(fault.printed.split(":")[1])
    assert told.line() == fault.printed.replace(f"rig.toml:{line}:", f"rig.toml:{line + 20}:", 1)


WITHOUT_A_LINE = {
    "nothing": ("", "rig.toml: the rig has no [[element]]; "),
    "no-drive": (
        re.sub(r"(?s)\[\[drive\]\].*?(?=\[\[reading)", "", WHOLE),
        "rig.toml: the rig has no [[drive]]; ",
    ),
    "no-reading": (WHOLE.split("[[reading]]")[0], "rig.toml: the rig has no [[reading]]; "),
    "too-deep": (
        "a = " + "[" * 5000 + "]" * 5000,
        "rig.toml: the file cannot be read as TOML: nested too deep; ",
    ),
    "digits": (
        "a = " + "1" * 5000,
        "rig.toml: the file cannot be read as TOML: a number has too many digits; ",
    ),
}


@pytest.mark.parametrize("name", WITHOUT_A_LINE)
def test_what_is_missing_has_no_line(name: str, monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """What does not stand in the file is told of the file, and what to do."""
    text, begins = WITHOUT_A_LINE[name]
    told = refusal(text, monkeypatch, tmp_path)
    assert told.line().startswith(begins)
    assert told.do


def test_bytes_that_are_no_text(tmp_path: Path) -> None:
    """A file that is not UTF-8, is missing, or is a folder is refused with what to do."""
    file = tmp_path / "rig.toml"
    file.write_bytes(b'[rig]\ntitle = "\xff"\n')
    with pytest.raises(RigError, match=r"rig\.toml:2: the file is not UTF-8 text") as caught:
        load_rig(file)
    assert caught.value.code == "not-text"
    for missing in (tmp_path / "nowhere.toml", tmp_path):
        with pytest.raises(RigError, match="the rig file cannot be read") as caught:
            load_rig(missing)
        assert caught.value.code == "cannot-read"


def test_command_line_prints_the_line(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    """`predict` prints the same line to standard error, nothing to standard output, and leaves with 2."""
    fault = next(f for f in FAULTS if f.name == "wrong-unit")
    monkeypatch.chdir(tmp_path)
    Path("rig.toml").write_text(fault.text, encoding="utf-8")
    assert run(["predict", "rig.toml"]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert fault.printed in err
    assert len(err.strip().split("\n")) == 1
