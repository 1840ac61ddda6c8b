"""The command line's promises: exit codes, one-line refusals, standard output for machines alone."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from rigtally.cli.main import run
from test_estimation_certified import BOXBOD, MISRA

SAMPLES = Path(__file__).parents[1] / "sample_data"


def step_log(path: Path, *, unit: str = "kPa", constant: bool = False) -> Path:
    """A small log of our own making: a second-order step response with a little noise."""
    rng = np.random.default_rng(4)
    t = np.arange(1500) * 1e-3
    u = np.where(t < 0.2, 0.0, 50.0)
    if constant:
        u = np.full(t.size, 5.0)
    w, z = 40.0, 0.4
    d = w * np.sqrt(1 - z * z)
    late = np.clip(t - 0.2 + 5e-4, 0, None)
    y = 50.0 * (1 - np.exp(-z * w * late) * (np.cos(d * late) + z * w / d * np.sin(d * late)))
    y = np.where(t < 0.2, 0.0, y) + rng.normal(0, 0.3, t.size) + 2.0
    rows = "\n".join(f"{a:.3f},{b:.4f},{c:.4f}" for a, b, c in zip(t, u, y, strict=True))
    path.write_text(f"t [s],p_in [{unit}],p_out [{unit}]\n{rows}\n")
    return path


def call(capsys: pytest.CaptureFixture[str], *arguments: str | Path) -> tuple[int, str, str]:
    code = run([str(a) for a in arguments])
    caught = capsys.readouterr()
    return code, caught.out, caught.err


def test_fit_prints_one_json_document(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """--json: one document on standard output, nothing on standard error, quantities as promised."""
    log = step_log(tmp_path / "log.csv")
    code, out, err = call(capsys, "fit", log, "--input", "p_in", "--output", "p_out", "--json")
    assert (code, err) == (0, "")
    document = json.loads(out)
    assert document["schema"] == "rigtally/fit/1"
    assert document["form"] == "second-order"
    assert document["log"]["sha256"]
    assert document["log"]["samples"] == 1500
    for name in ("gain", "natural_frequency", "damping_ratio"):
        q = document["parameters"][name]
        assert set(q) == {"value", "unit", "u", "interval95", "dof"}
        assert q["interval95"][0] < q["value"] < q["interval95"][1]
    assert document["parameters"]["natural_frequency"]["unit"] == "rad/s"
    assert document["parameters"]["natural_frequency"]["value"] == pytest.approx(40.0, rel=0.03)
    assert document["correlation"]["names"] == ["gain", "natural_frequency", "damping_ratio"]
    assert document["other_road"]["road"] == "time"


def test_saved_fit_is_the_printed_one(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """--save writes the same document that --json prints."""
    log = step_log(tmp_path / "log.csv")
    saved = tmp_path / "fit.json"
    code, out, _ = call(capsys, "fit", log, "--input", "p_in", "--output", "p_out", "--json", "--save", saved)
    assert code == 0
    assert saved.read_text(encoding="utf-8") == out


def test_a_held_and_a_bounded_parameter(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """--set holds a parameter with u = 0; --range keeps another inside."""
    log = step_log(tmp_path / "log.csv")
    arguments = ["fit", log, "--input", "p_in", "--output", "p_out", "--json", "--set", "damping_ratio=0.4"]
    code, out, _ = call(capsys, *arguments, "--range", "natural_frequency=10:100")
    assert code == 0
    held = json.loads(out)["parameters"]["damping_ratio"]
    assert (held["value"], held["u"]) == (0.4, 0.0)


@pytest.mark.parametrize(
    ("arguments", "code", "name"),
    [
        (["fit", "{dir}/none.csv", "--input", "a", "--output", "b"], 3, None),
        (["fit", "{log}", "--input", "p_inn", "--output", "p_out"], 3, "no-such-channel"),
        (["fit", "{log}"], 3, "which-channel"),
        (["fit", "{log}", "--input", "p_in", "--output", "p_out", "--form", "2nd"], 2, "unknown-form"),
        (["fit", "{log}", "--input", "p_in", "--output", "p_out", "--set", "zeta=0.7"], 2, None),
        (["fit", "{log}", "--input", "p_in", "--output", "p_out", "--set", "damping_ratio"], 2, "bad-option"),
        (["fit", "{log}", "--input", "p_in", "--output", "p_out", "--noise", "loud"], 2, "bad-option"),
        (
            ["fit", "{log}", "--input", "p_in", "--output", "p_out", "--unit", "p_in=kPaa"],
            None,
            "unknown-unit",
        ),
        (["fit", "{log}", "--input", "p_in", "--output", "p_out", "--to", "0.003"], 3, None),
        (["fit", "{flat}", "--input", "p_in", "--output", "p_out"], 3, "constant-input"),
        (["tally", "{log}"], 2, "command-line"),
        (["fit"], 2, "command-line"),
        (["fit", "{log}", "--no-such-option"], 2, "command-line"),
        (["starter", "perpetual-motion"], 2, None),
        (["predict", "{dir}/none.toml"], 2, None),
    ],
)
def test_refusals_are_one_line_and_a_code(
    arguments: list[str],
    code: int | None,
    name: str | None,
    tmp_path: Path,
    capsys: pytest.CaptureFixture[str],
) -> None:
    """What, where, what to do on one line of standard error; with --json a refusal document too."""
    log = step_log(tmp_path / "log.csv")
    flat = step_log(tmp_path / "flat.csv", constant=True)
    texts = [a.format(dir=tmp_path, log=log, flat=flat) for a in arguments]
    found, out, err = call(capsys, *texts)
    assert found == code or (code is None and found in (2, 3))
    assert out == ""
    assert err.count("\n") == 1
    assert "Traceback" not in err
    found_json, out, err = call(capsys, *texts, "--json")
    assert found_json == found
    refusal = json.loads(out)
    assert refusal["schema"] == "rigtally/refusal/1"
    assert set(refusal) == {"schema", "code", "what", "where", "do"}
    assert refusal["what"]
    assert refusal["code"] not in ("", "internal")
    if name:
        assert refusal["code"] == name


def test_nothing_is_half_written(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A save that cannot be done leaves no file and says so."""
    log = step_log(tmp_path / "log.csv")
    target = tmp_path / "nowhere" / "fit.json"
    code, out, err = call(capsys, "fit", log, "--input", "p_in", "--output", "p_out", "--save", target)
    assert code == 2
    assert out == ""
    assert "nowhere" in err
    assert list(tmp_path.iterdir()) == [log]


def test_starters_are_listed_and_run(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """`starter` lists its kinds; each one written is predicted without complaint."""
    code, out, _ = call(capsys, "starter")
    kinds = out.split()
    assert code == 0
    assert len(kinds) >= 8
    for kind in kinds:
        file = tmp_path / f"{kind}.toml"
        assert call(capsys, "starter", kind, "--save", file)[0] == 0
        code, out, err = call(capsys, "predict", file, "--json")
        assert (code, err) == (0, "")
        assert json.loads(out)["schema"] == "rigtally/prediction/1"


def test_inspect_says_what_is_in_the_log(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """`inspect`: channels with units, the clock, the step as an event, and what to run next."""
    log = step_log(tmp_path / "log.csv")
    code, out, err = call(capsys, "inspect", log, "--json")
    assert (code, err) == (0, "")
    document = json.loads(out)
    assert document["schema"] == "rigtally/inspection/1"
    assert {c["name"]: c["unit"] for c in document["channels"]} == {"p_in": "Pa", "p_out": "Pa"}
    assert document["clock"]["interval"] == pytest.approx(1e-3, rel=1e-9)
    assert document["events"][0]["start"]["value"] == pytest.approx(0.2, abs=0.002)
    code, out, _ = call(capsys, "inspect", log)
    assert code == 0
    assert "rigtally fit" in out


def tally_arguments() -> list[Path]:
    rig = SAMPLES / "impulse_line" / "rig.toml"
    return [*sorted(rig.parent.glob("line_step_*.csv")), rig]


def test_the_main_job_tallies(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Three repeats of the sample impulse line agree with its rig file; the document is whole."""
    code, out, err = call(capsys, "tally", *tally_arguments(), "--json", "--enforce")
    assert (code, err) == (0, "")
    document = json.loads(out)
    assert document["schema"] == "rigtally/tally/1"
    assert document["agreement"]["verdict"] == "agrees"
    for name in ("gain", "natural_frequency", "damping_ratio"):
        row = document["agreement"]["parameters"][name]
        assert set(row) >= {"fitted", "predicted", "difference", "en", "agrees"}
    assert document["prediction"]["budget"]["natural_frequency"]
    shares = [row["share"] for row in document["prediction"]["budget"]["natural_frequency"]]
    assert sum(shares) == pytest.approx(1.0)


def test_the_refilled_line_does_not_tally(capsys: pytest.CaptureFixture[str]) -> None:
    """After the careless refill bench and model differ, and the gauge chamber's compliance explains it."""
    rig = SAMPLES / "impulse_line" / "rig.toml"
    log = next((SAMPLES / "impulse_line").glob("after_refill.*"))
    code, out, _ = call(capsys, "tally", log, rig, "--json", "--enforce")
    assert code == 1
    document = json.loads(out)
    assert document["agreement"]["verdict"] == "differs"
    first = document["explanations"][0]
    assert any("compliance" in name for name in [*first["elements"], *first["indistinguishable"]])


@pytest.mark.parametrize(
    ("stamps", "values", "gain", "u_gain", "rate", "u_rate"),
    [
        # BoxBOD: oxygen demand (mg/L) against days, measured
        (BOXBOD[0], BOXBOD[1], 2.1380940889e2, 1.2354515176e1, 5.4723748542e-1, 1.0455993237e-1),
        # Misra1a: volume against pressure, measured; the pressure is read as time, for the arithmetic only
        (MISRA[0], MISRA[1], 2.3894212918e2, 2.7070075241, 5.5015643181e-4, 7.2668688436e-6),
    ],
    ids=["BoxBOD", "Misra1a"],
)
def test_certified_responses_through_the_command_line(
    stamps: list[float], values: list[float], gain: float, u_gain: float, rate: float, u_rate: float,
    tmp_path: Path, capsys: pytest.CaptureFixture[str],
) -> None:  # fmt: skip
    """NIST's certified gain, rate and standard deviations (Statistical Reference Datasets, public domain, opened)."""
    log = tmp_path / "certified.csv"
    log.write_text("t [s],y\n" + "".join(f"{t},{y}\n" for t, y in zip(stamps, values, strict=True)))
    assumed = ["--step-at", "0", "--offset", "0", "--drift", "none", "--start", "rest", "--noise", "white"]
    code, out, _ = call(capsys, "fit", log, "--output", "y", "--form", "first-order", *assumed, "--json")
    assert code == 0
    found = json.loads(out)["parameters"]
    tau = found["time_constant"]
    assert found["gain"]["value"] == pytest.approx(gain, rel=2e-6)
    assert found["gain"]["u"] == pytest.approx(u_gain, rel=2e-5)
    assert 1 / tau["value"] == pytest.approx(rate, rel=2e-6)
    assert tau["u"] / tau["value"] ** 2 == pytest.approx(u_rate, rel=2e-5)
