"""Text logs: headings, preambles, gaps, stamps, overrides; what is not certain is refused."""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

import rigtally as rt
from rigtally.errors import LogError, RigtallyError
from rigtally.records.record import Record

Write = Callable[[str], Path]


@pytest.fixture
def write(tmp_path: Path) -> Write:
    def to(text: str) -> Path:
        path = tmp_path / "log.txt"
        path.write_text(text, encoding="utf-8", newline="")
        return path

    return to


def refusal(path: Path, **options: object) -> RigtallyError:
    with pytest.raises(RigtallyError) as caught:
        rt.read(path, **options)  # type: ignore[arg-type]
    assert caught.value.do and caught.value.what
    return caught.value


def rows(pattern: str, count: int = 60) -> str:
    """Lines where {t} rises by 0.25 s and {p} swings."""
    return "".join(
        pattern.format(t=0.25 * k, k=k, p=2.5 + np.sin(k / 3.0), q=10.0 - k / 7.0) + "\n"
        for k in range(count)
    )


def test_the_preamble_is_kept(write: Write) -> None:
    """Metadata in whatever form, provenance with hash and lines, two lines on how it was read."""
    path = write(
        "Bench log\nOperator: M. Roth\nGain = 2.5\nSerial no.;4711\n\n\nt [s];p [bar]\n"
        + rows("{t:.2f};{p:.3f}")
        + "\nEnd of log\nChecksum: 12\n"
    )
    provenance = rt.read(path).provenance
    assert provenance.metadata["Operator"] == "M. Roth"
    assert provenance.metadata["Gain"] == "2.5"
    assert provenance.metadata["Serial no."] == "4711"
    assert provenance.metadata["footer 1"] == "End of log"
    assert provenance.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    assert provenance.lines == (8, 67)
    assert "semicolons" in provenance.how_read[0] and "rows in lines 8 to 67" in provenance.how_read[0]
    assert "p [bar]" in provenance.how_read[1]


@pytest.mark.parametrize("length", [0, 1, 25, 400, 3000])
def test_preambles_of_any_length(length: int, write: Write) -> None:
    """Hundreds of lines with numbers and commas above the names change nothing."""
    above = "".join(f"setting {k}, {k * 0.5}, on\n" for k in range(length))
    found = rt.read(write(above + "t [s],p [bar],q [bar]\n" + rows("{t:.2f},{p:.3f},{q:.3f}")))
    assert (found.names, found.count) == (("p", "q"), 60)


@pytest.mark.parametrize(
    ("heading", "unit", "factor"),
    [
        ("p [kPa]", "Pa", 1e3),
        ("p (kPa)", "Pa", 1e3),
        ("p / kPa", "Pa", 1e3),
        ("p/kPa", "Pa", 1e3),
        ("p in kPa", "Pa", 1e3),
        ("p [bar(g)]", "Pa", 1e5),
        ("p [Nm]", "N*m", 1.0),
        ("p [m/s²]", "m/s^2", 1.0),
        ("p [PSI]", "Pa", 6894.757293168361),
        ("p [-]", "", 1.0),
        ("p [%]", "", 0.01),
    ],
)
def test_units_in_headings(heading: str, unit: str, factor: float, write: Write) -> None:
    """A unit in brackets, after a stroke or after "in" is read, and kept as written."""
    channel = rt.read(write(f"t [s];{heading}\n" + rows("{t:.2f};{p:.3f}"))).channel("p")
    assert (channel.unit, channel.unit_known) == (unit, True)
    assert channel.factor == pytest.approx(factor, rel=1e-12)
    assert channel.samples[0] == pytest.approx(2.5 * factor)


@pytest.mark.parametrize("heading", ["a [g]", "T [C]", "T [F]", "p [foo]", "p [kPa_amb]"])
def test_a_unit_that_is_not_certain_is_not_taken(heading: str, write: Write) -> None:
    """g, C, F mean two things and unknown units none: the channel has no unit, and says so."""
    (channel,) = rt.read(write(f"t [s];{heading}\n" + rows("{t:.2f};{p:.3f}"))).channels
    assert (channel.unit_known, channel.factor) == (False, 1.0)
    assert [fault.kind for fault in channel.faults] == ["unit-unknown"]


@pytest.mark.parametrize("heading", ["p", "p (raw)", "channel (A)", "dp/dt"])
def test_words_in_a_heading_are_no_unit(heading: str, write: Write) -> None:
    """What is no unit belongs to the name."""
    (channel,) = rt.read(write(f"t [s];{heading}\n" + rows("{t:.2f};{p:.3f}"))).channels
    assert (channel.name, channel.unit_known) == (heading, False)


def test_a_stated_unit_overrides(write: Write) -> None:
    """units= wins over the heading; one for a channel that is not there is refused."""
    path = write("t [s];p [kPa]\n" + rows("{t:.2f};{p:.3f}"))
    assert rt.read(path, units={"p": "bar"}).channel("p").factor == 1e5
    assert refusal(path, units={"x": "bar"}).code == "no-such-channel"
    assert refusal(path, units={"p": "blorp"}).code == "unknown-unit"


@pytest.mark.parametrize(
    "gap",
    [
        "",
        "NaN",
        "nan",
        "N/A",
        "#N/A",
        "null",
        "NULL",
        "none",
        "-",
        "--",
        "---",
        "?",
        "ERR",
        "#DIV/0!",
        "1.#QNAN",
        "OVL",
        "missing",
        "9.91E37",
        "inf",
    ],
)
def test_gaps_in_many_spellings(gap: str, write: Write) -> None:
    """What stands for "no value" is NaN, counted and named; nothing else moves."""
    lines = rows("{t:.2f};{p:.3f};{q:.3f}").splitlines()
    for row in (11, 40):
        t, _, q = lines[row].split(";")
        lines[row] = f"{t};{gap};{q}"
    found = rt.read(write("t [s];p [kPa];q [kPa]\n" + "\n".join(lines) + "\n"))
    p = found.channel("p")
    assert np.flatnonzero(np.isnan(p.samples)).tolist() == [11, 40]
    assert sum(fault.count for fault in p.faults) == 2
    assert found.channel("q").faults == ()


def test_words_beside_numbers(write: Write) -> None:
    """A column of words is left out and named; asked for, it is refused."""
    path = write("t [s],p [kPa],state,q [kPa]\n" + rows("{t:.2f},{p:.3f},OK,{q:.3f}"))
    found = rt.read(path)
    assert found.names == ("p", "q")
    assert "left out: state" in found.provenance.how_read[1]
    assert refusal(path, channels=["state"]).code == "not-numeric"
    assert rt.read(path, channels=["q"]).names == ("q",)


def test_columns_of_one_name_are_told_apart(write: Write) -> None:
    """The second p is "p (2)"; no column is lost."""
    found = rt.read(write("t [s],p [kPa],p [kPa]\n" + rows("{t:.2f},{p:.3f},{q:.3f}")))
    assert found.names == ("p", "p (2)")


def test_lines_between_the_rows(write: Write) -> None:
    """Blank and comment lines between the rows are no rows, and are counted."""
    lines = rows("{t:.2f},{p:.3f}").splitlines()
    lines.insert(30, "# operator left")
    lines.insert(20, "")
    found = rt.read(write("t [s],p [kPa]\n" + "\n".join(lines) + "\n"))
    assert found.count == 60
    assert "2 blank or comment lines" in found.provenance.how_read[0]


@pytest.mark.parametrize(
    ("line", "code"),
    [
        ("5.10,1.5,2.5,9.5", "ragged"),
        ("5.10,1.5", "ragged"),
        ('5.10,"1.5,2.5', "quotes"),
        ("5.10.3,1.5,2.5", "unreadable"),
        ("noon,1.5,2.5", "unreadable"),
    ],
)
def test_a_damaged_line_is_named(line: str, code: str, write: Write) -> None:
    """A line that cannot be a row is refused by number; a time that is no number is left out by name."""
    lines = rows("{t:.2f},{p:.3f},{q:.3f}").splitlines()
    lines[20] = line
    path = write("t [s],p [kPa],q [kPa]\n" + "\n".join(lines) + "\n")
    if code == "unreadable":
        found = rt.read(path)
        assert found.count in (59, 60)
        assert found.clock_faults
        return
    fault = refusal(path)
    assert fault.code == code
    assert "line 22" in fault.where


def test_two_tables_are_refused(write: Write) -> None:
    """A second table below the first is not run into it, nor is one of them dropped."""
    table = "t [s],p [kPa],q [kPa]\n" + rows("{t:.2f},{p:.3f},{q:.3f}")
    assert refusal(write(table + table)).code in (
        "two-tables",
        "ragged",
        "unreadable-cell",
        "clock-backwards",
    )
    assert refusal(write(table + "\n" + table)).code in ("two-tables", "ragged", "clock-backwards")


@pytest.mark.parametrize(
    ("text", "options"),
    [
        (rows("{k},{k}"), {"separator": "comma", "decimal": "."}),
        ("u;p\n" + rows("1,{k:03d};2,{k:03d}"), {"decimal": ","}),
        ("u;p\n" + rows("1,{k:03d};2,{k:03d}"), {"thousands": ","}),
        ("u;p\n" + rows("1.{k:03d};2.{k:03d}"), {"decimal": "."}),
    ],
)
def test_two_readings_are_refused_and_a_stated_one_is_taken(
    text: str, options: dict[str, str], write: Write
) -> None:
    """Without evidence both readings are shown; with the sign stated the file is read so."""
    path = write(text)
    fault = refusal(path, rate=4)
    assert fault.code == "ambiguous"
    assert " or as " in fault.what
    assert "--" in fault.do
    assert isinstance(rt.read(path, rate=4, **options), Record)  # type: ignore[arg-type]


def test_late_evidence_decides(write: Write) -> None:
    """Marks that first appear thousands of rows down are weighed, not run over."""
    lines = [f"{k % 900 + 1};{k}" for k in range(6000)]
    for row in range(4000, 4010):
        lines[row] = f"1.{row % 1000:03d};{row}"
    path = write("n;k\n" + "\n".join(lines) + "\n")
    # whole numbers with a point and three digits: a thousands mark or decimals
    assert refusal(path, rate=1).code == "ambiguous"
    lines[5000] = "1.234.567;5000"
    lines[5001] = "2.234.567;5001"
    path = write("n;k\n" + "\n".join(lines) + "\n")
    n = rt.read(path, rate=1).channel("n").samples
    assert (n[4003], n[5000], n[3]) == (1003.0, 1234567.0, 4.0)
    lines[5000:5002] = ["0,5;5000", "0,25;5001"]
    path = write("n;k\n" + "\n".join(lines) + "\n")
    n = rt.read(path, rate=1).channel("n").samples
    assert (n[4003], n[5000], n[3]) == (1003.0, 0.5, 4.0)


def test_decimal_comma_between_commas_is_never_taken_as_columns(write: Write) -> None:
    """t, p with decimal commas between commas: four whole numbers a line are refused."""
    assert refusal(write("t [s],p [kPa]\n0,00,1,5\n" + "0,25,1,6\n" * 1)).code in (
        "ambiguous",
        "header-mismatch",
    )
    assert refusal(write("0,00,1,5\n0,25,1,6\n0,50,1,7\n")).code == "ambiguous"
    assert (
        refusal(write("t,p,q\n" + rows("2024-01-01 00:00:{k:02d},500,{p:.3f},7.5"))).code == "header-mismatch"
    )


@pytest.mark.parametrize(
    ("heading", "pattern", "interval"),
    [
        ("time [ms],p", "{k},{p:.3f}", 1e-3),
        ("time_us,p", "{k},{p:.3f}", 1e-6),
        ("t,p", "{t:.2f},{p:.3f}", 0.25),
        ("elapsed time (min),p", "{t:.2f},{p:.3f}", 15.0),
        ("timestamp,p", "170000{k:04d},{p:.3f}", 1.0),
        ("timestamp,p", "1700000000{k:03d},{p:.3f}", 1e-3),
        ("time,p", "12:30:{k:02d},{p:.3f}", 1.0),
        ("time,p", "11:59:{k:02d} PM,{p:.3f}", 1.0),
        ("time,p", "2024-02-29T10:00:{k:02d}Z,{p:.3f}", 1.0),
        ("time,p", "29/02/2024 10:00:{k:02d},{p:.3f}", 1.0),
        ("time,p", "3/4/2024 10:00:{k:02d},{p:.3f}", 1.0),
        ("time,p", "2024/2/29 10:00:{k:02d},{p:.3f}", 1.0),
        ("time,p", "1-Feb-2024 10:00:{k:02d}.5,{p:.3f}", 1.0),
        ("time,p", "17:{k:02d}.5,{p:.3f}", 1.0),
        ("date,time,p", "2024-02-29,7:{k:02d},{p:.3f}", 60.0),
    ],
)
def test_time_in_many_forms(heading: str, pattern: str, interval: float, write: Write) -> None:
    """Seconds, milliseconds, minutes, seconds since 1970, times of day and dates."""
    found = rt.read(write(heading + "\n" + rows(pattern)))
    assert found.names == ("p",)
    assert found.interval == pytest.approx(interval, rel=1e-9)


def test_time_passes_midnight_and_zones(write: Write) -> None:
    """A time of day goes on past midnight; stamps of two zones are brought to one."""
    lines = [
        f"{(86390 + k) // 3600 % 24:02d}:{(86390 + k) // 60 % 60:02d}:{(86390 + k) % 60:02d};{k}.5"
        for k in range(30)
    ]
    assert rt.read(write("time;p\n" + "\n".join(lines) + "\n")).interval == 1.0
    lines = [
        f"2024-10-27T0{2 if k < 10 else 1}:00:{k:02d}{'+02:00' if k < 10 else '+01:00'};{k}.5"
        for k in range(30)
    ]
    assert rt.read(write("time;p\n" + "\n".join(lines) + "\n")).interval == 1.0


def test_day_or_month_first_matters_only_over_days(write: Write) -> None:
    """Where the dates move and either may be the day, the log is refused."""
    text = "date;p\n" + "".join(f"0{k}/03/2024 00:00:00;{k}.5\n" for k in range(1, 10))
    assert refusal(write(text)).code == "ambiguous"
    text += "13/03/2024 00:00:00;1.5\n"
    assert isinstance(rt.read(write(text)), Record)


def test_time_without_unit_in_whole_numbers_is_refused(write: Write) -> None:
    """0, 1, 2 … may be seconds, milliseconds or rows; the unit or the rate settles it."""
    path = write("time;p\n" + rows("{k};{p:.4f}"))
    assert refusal(path).code == "time-unit"
    assert rt.read(path, units={"time": "ms"}).interval == pytest.approx(1e-3)
    assert rt.read(path, rate="1 kHz").interval == pytest.approx(1e-3)
    path = write("Sampling rate: 2 kHz\ntime;p\n" + "".join(f"{k * 500};{k}.5\n" for k in range(50)))
    assert rt.read(path).interval == pytest.approx(5e-4)


def test_a_temperature_named_capital_t_is_no_time(write: Write) -> None:
    """T [°C] is a channel."""
    found = rt.read(write("T [°C];p\n" + rows("{q:.2f};{p:.3f}")), rate="4 Hz")
    assert found.names == ("T", "p")


def test_rate_from_the_preamble(write: Write) -> None:
    """A stated rate with a unit stands in for a time column; without one it is not guessed."""
    body = "p;q\n" + rows("{p:.4f};{q:.4f}")
    assert rt.read(write("Sampling rate: 2.5 kHz\n" + body)).interval == pytest.approx(4e-4)
    assert rt.read(write("Sampling interval [ms]: 0.4\n" + body)).interval == pytest.approx(4e-4)
    assert refusal(write("Sampling rate: 2500\n" + body)).code == "no-clock"
    assert refusal(write(body), rate="3 kg").code == "bad-rate"


def test_header_can_be_stated(write: Write) -> None:
    """header=2 takes that line's names; header="none" takes none."""
    path = write("p before,q before\np,q\nx,y\n" + rows("{p:.3f},{q:.3f}"))
    assert rt.read(path, rate=4, header=2).names == ("p", "q")
    assert rt.read(path, rate=4, header="none").names == ("column 1", "column 2")
    assert refusal(path, rate=4, header=40).code == "header-mismatch"


def test_further_spellings_of_missing(write: Write) -> None:
    """missing= adds what this logger writes."""
    path = write("t [s];p\n" + rows("{t:.2f};{p:.3f}") + "15.00;-999.25\n")
    assert np.isnan(rt.read(path, missing=["-999.25"]).channel("p").samples[-1])


def test_no_names_at_all(write: Write) -> None:
    """Columns are numbered; the first is the time where it rises evenly in decimals."""
    found = rt.read(write(rows("{t:.2f} {p:.3f} {q:.3f}")))
    assert (found.names, found.interval) == (("column 2", "column 3"), 0.25)
    assert rt.read(write(rows("{p:.3f} {t:.2f}")), time=2).names == ("column 1",)


@pytest.mark.parametrize(
    ("options", "code"),
    [
        ({"separator": "x"}, "bad-option"),
        ({"decimal": ":"}, "bad-option"),
        ({"thousands": "x"}, "bad-option"),
        ({"encoding": "nonsense"}, "encoding"),
        ({"header": "first"}, "bad-option"),
        ({"rate": "fast"}, "bad-rate"),
        ({"time": "when"}, "no-such-channel"),
        ({"channels": ["x"]}, "no-such-channel"),
        ({"encoding": "zlib"}, "encoding"),
    ],
)
def test_wrong_options_are_refused(options: dict[str, object], code: str, write: Write) -> None:
    """Each with its own code, and what to do."""
    assert refusal(write("t [s];p\n" + rows("{t:.2f};{p:.3f}")), **options).code == code


def test_a_wrong_layout_that_is_stated_is_refused(write: Write) -> None:
    """A stated decimal comma in a file of decimal points, or a separator that is not there."""
    path = write("t [s];p\n" + rows("{t:.2f};{p:.3f}"))
    assert isinstance(refusal(path, decimal=","), LogError)
    assert isinstance(refusal(path, separator="tab"), LogError)


def test_hours_and_minutes_or_minutes_and_seconds(write: Write) -> None:
    """0:49 is one or the other: refused, and left aside where the rate is stated."""
    path = write("time;p\n" + rows("0:{k:02d};{p:.4f}"))
    assert refusal(path).code == "ambiguous"
    assert rt.read(path, rate="1 Hz").interval == 1.0


def test_a_file_that_ends_within_its_last_cell(write: Write) -> None:
    """Without a last line end and with fewer decimals the last cell is left out, and named."""
    text = "t [s];p;q\n" + rows("{t:.2f};{p:.4f};{q:.4f}")
    q = rt.read(write(text + "15.00;2.5000;1.2")).channel("q")
    assert np.isnan(q.samples[-1])
    assert [fault.kind for fault in q.faults] == ["cut"]
    assert rt.read(write(text + "15.00;2.5000;1.2000")).channel("q").faults == ()
    assert refusal(write(text + "15.00;2.50")).code == "ragged"


def test_a_named_time_column_may_have_any_name(write: Write) -> None:
    """time= takes a column whose name does not tell, also where channels are chosen."""
    path = write("n;x [s];p;q\n" + rows("{k};{t:.2f};{p:.4f};{q:.4f}"))
    assert refusal(path).code == "no-clock"
    found = rt.read(path, time="x", channels=["q"])
    assert (found.names, found.interval) == (("q",), 0.25)
