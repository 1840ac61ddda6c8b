"""Two roads to one answer: nothing shared between the form and the result, and the same numbers."""

from __future__ import annotations

import ast
import importlib
import sys
import types
from pathlib import Path

import numpy as np
import pytest

import rigtally as rt
from rigtally.errors import FitError

ESTIMATION = Path(__file__).parents[1] / "src" / "rigtally" / "estimation"
SAMPLES = Path(__file__).parents[1] / "sample_data"
BEFORE_AND_AFTER = {"trial", "result"}  # what is fitted to what, and what a road leaves behind


def reached(module: str) -> set[str]:
    """Modules of the room that a module reaches, by any import in its text."""
    found: set[str] = set()
    waiting = [module]
    while waiting:
        name = waiting.pop()
        if name in found:
            continue
        found.add(name)
        if name in BEFORE_AND_AFTER:
            continue
        for node in ast.walk(ast.parse((ESTIMATION / f"{name}.py").read_text(encoding="utf-8"))):
            if isinstance(node, ast.ImportFrom) and (node.module or "").startswith("rigtally.estimation"):
                parts = (node.module or "").split(".")
                waiting.extend([parts[2]] if len(parts) > 2 else [alias.name for alias in node.names])
    return found


def test_the_roads_share_no_module() -> None:
    """From the form to the result the two roads have no module of the estimation room in common."""
    assert reached("time_domain") & reached("frequency_domain") <= BEFORE_AND_AFTER


def made(seed: int = 3) -> tuple[np.ndarray, np.ndarray, float]:
    """A record with a known answer: ωn = 30 rad/s, ζ = 0.35, K = 2 (invented)."""
    rng = np.random.default_rng(seed)
    interval = 2e-3
    u = np.repeat(rng.choice([-1.0, 1.0], 60), 50).astype(float)
    from scipy import signal

    system = signal.cont2discrete(([2.0 * 900.0], [1.0, 21.0, 900.0]), interval, "zoh")
    y = signal.lfilter(system[0][0], system[1], u) + rng.normal(0, 0.02, u.size) + 0.7
    return u, y, interval


@pytest.mark.parametrize(
    ("broken", "road", "left"),
    [("time_domain", "frequency", "frequency"), ("frequency_domain", "frequency", "time"),
     ("frequency_domain", "time", "time"), ("time_domain", "time", "frequency")],
)  # fmt: skip
def test_either_road_answers_alone(
    broken: str, road: str, left: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """With either module replaced by one that raises, the other still gives its answer, and it is said."""
    stand_in = types.ModuleType(f"rigtally.estimation.{broken}")

    def refuse(*args: object, **keywords: object) -> object:
        raise RuntimeError("this road is closed")

    for name in ("fit_time", "fit_frequency", "profile"):
        setattr(stand_in, name, refuse)
    monkeypatch.setitem(sys.modules, f"rigtally.estimation.{broken}", stand_in)
    importlib.import_module("rigtally.estimation.fit")
    package = sys.modules["rigtally.estimation"]
    monkeypatch.setattr(package, broken, stand_in, raising=False)
    for name, module in list(sys.modules.items()):
        if name.startswith("rigtally.estimation.") and module is not stand_in:
            for attribute in ("fit_time", "fit_frequency"):
                function = getattr(module, attribute, None)
                if getattr(function, "__module__", "").endswith(broken):
                    monkeypatch.setattr(module, attribute, refuse)
    u, y, interval = made()
    fit = rt.fit(input=u, output=y, interval=interval, form="second-order", road=road, between="held")
    assert fit.road == left
    assert fit.parameters["natural_frequency"].value == pytest.approx(30.0, rel=0.01)
    assert "other-road-failed" in {warning.code for warning in fit.warnings}


def test_the_roads_agree_on_a_made_record() -> None:
    """Within a tenth of u, on a record with a known answer."""
    u, y, interval = made()
    one = rt.fit(input=u, output=y, interval=interval, form="second-order", road="frequency", between="held")
    two = rt.fit(input=u, output=y, interval=interval, form="second-order", road="time", between="held")
    for name, first in one.parameters.items():
        assert abs(first.value - two.parameters[name].value) < 0.1 * first.u
        assert two.parameters[name].u == pytest.approx(first.u, rel=0.1)
    assert one.roads_agree
    assert two.roads_agree


def sample_fits() -> list[tuple[str, list[Path]]]:
    """Every sample log with its rig."""
    out: list[tuple[str, list[Path]]] = []
    for rig in sorted(SAMPLES.glob("*/rig.toml")):
        logs = sorted(f for f in rig.parent.iterdir() if f.suffix in (".csv", ".h5", ".txt", ".gz"))
        out.extend((f"{rig.parent.name}/{log.name}", [log, rig]) for log in logs)
    return out


@pytest.mark.parametrize(("name", "files"), sample_fits(), ids=lambda x: x if isinstance(x, str) else "")
def test_the_roads_agree_on_every_sample(
    name: str, files: list[Path], capsys: pytest.CaptureFixture[str]
) -> None:
    """On every sample log the two roads' parameters differ by less than 0.1 u."""
    import json

    from rigtally.cli.main import run

    assert run(["tally", *map(str, files), "--json"]) == 0
    fit = json.loads(capsys.readouterr().out)["fit"]
    other = fit["other_road"]
    assert other["agree"] is True
    for key, quantity in other["parameters"].items():
        ours = fit["parameters"].get(key)
        if ours is not None and ours["u"]:
            assert abs(quantity["value"] - ours["value"]) < 0.1 * ours["u"], key


def test_no_answer_where_both_roads_are_closed(monkeypatch: pytest.MonkeyPatch) -> None:
    """No fit that could be trusted: exit code 4's exception, not a number."""

    def refuse(*args: object, **keywords: object) -> object:
        raise FitError("this road is closed", code="no-convergence")

    for module in ("time_domain", "frequency_domain"):
        importlib.import_module(f"rigtally.estimation.{module}")
    for name, module in list(sys.modules.items()):
        if name.startswith("rigtally.estimation"):
            for attribute in ("fit_time", "fit_frequency"):
                if hasattr(module, attribute):
                    monkeypatch.setattr(module, attribute, refuse)
    u, y, interval = made()
    with pytest.raises(FitError):
        rt.fit(input=u, output=y, interval=interval, form="second-order", between="held")
