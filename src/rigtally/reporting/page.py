"""The door to reports: one self-contained HTML file that works offline."""

from __future__ import annotations

import importlib.metadata
import platform
import sys
from collections.abc import Callable
from functools import lru_cache
from importlib import resources
from pathlib import Path
from typing import Any

import jinja2

from rigtally import __version__
from rigtally.errors import UsageError
from rigtally.estimation.result import Fit
from rigtally.files import write_whole
from rigtally.physics.prediction_result import Prediction
from rigtally.physics.rig import Rig
from rigtally.records.inspection import Inspection
from rigtally.records.record import Record
from rigtally.reporting.network_picture import network_picture
from rigtally.reporting.numbers import engineering, interval, percent, plain, quantity
from rigtally.reporting.plots import budget_plot, record_plot, response_plots
from rigtally.reporting.record_plot import channels_plot
from rigtally.reporting.words import CAUTION, change, spoken, verdict_sentence
from rigtally.tallying.result import Tally

MOST_TRACES = 4
_LIBRARIES = ("numpy", "scipy", "lmfit", "pint", "pandas", "h5py", "sympy", "matplotlib")


def report(result: Any, path: str | Path, *, rig: Rig | None = None) -> Path:
    """Write a report of a tally, a fit, a prediction or an inspection.

    Parameters
    ----------
    result : Tally, Fit, Prediction or Inspection
    path : str or Path
        The HTML file; replaced at once or not at all.
    rig : Rig, optional
        For the picture of the network.

    Raises
    ------
    UsageError
        code "no-report" for a result without a page; "cannot-write".
    """
    for kind, content in _CONTENTS:
        if isinstance(result, kind):
            page = _template().render(**content(result, rig), **_frame())
            return write_whole(path, page)
    raise UsageError(
        f"there is no report of a {type(result).__name__}",
        do="use --json or --save",
        code="no-report",
    )


@lru_cache(maxsize=1)
def _template() -> jinja2.Template:
    text = resources.files("rigtally.reporting").joinpath("templates/page.html").read_text(encoding="utf-8")
    environment = jinja2.Environment(autoescape=True, trim_blocks=True, lstrip_blocks=True)
    environment.filters.update(
        quantity=quantity, interval=interval, percent=percent, plain=plain, spoken=spoken, change=change
    )
    environment.globals["engineering"] = engineering
    return environment.from_string(text)


def _frame() -> dict[str, Any]:
    """What every page says: version, machine-independent environment, caution."""
    versions = {}
    for name in _LIBRARIES:
        try:
            versions[name] = importlib.metadata.version(name)
        except importlib.metadata.PackageNotFoundError:
            continue
    return {
        "version": __version__,
        "python": platform.python_version(),
        "libraries": versions,
        "command": " ".join(["rigtally", *(_bare(word) for word in sys.argv[1:])]) if _from_command() else "",
        "caution": CAUTION,
    }


def _from_command() -> bool:
    return Path(sys.argv[0]).stem in ("rigtally", "__main__") if sys.argv else False


def _bare(word: str) -> str:
    """A word of the command line; of a path only its name, so that no machine's folders stand in a report."""
    return Path(word).name if "/" in word and not word.startswith("-") else word


def _fit_parts(fit: Fit) -> dict[str, Any]:
    return {
        "fit": fit,
        "records": [(Path(t.label).name, record_plot(fit, t)) for t in fit.traces[:MOST_TRACES]],
        "more_records": max(len(fit.traces) - MOST_TRACES, 0),
    }


def _tally_content(tally: Tally, rig: Rig | None) -> dict[str, Any]:
    return {
        "kind": "tally",
        "title": tally.prediction.title,
        "verdict": tally.verdict,
        "headline": verdict_sentence(tally),
        "tally": tally,
        "prediction": tally.prediction,
        "responses": response_plots(tally.fit, tally.prediction, tally.response),
        "budget": budget_plot(tally.prediction, tally.prediction.names),
        "network": network_picture(rig) if rig is not None else "",
        "warnings": [*tally.fit.warnings, *tally.prediction.warnings, *tally.warnings],
        **_fit_parts(tally.fit),
    }


def _fit_content(fit: Fit, rig: Rig | None) -> dict[str, Any]:
    return {
        "kind": "fit",
        "title": f"Fit: {fit.form.name}",
        "headline": f"{', '.join(fit.form.outputs)} over {', '.join(fit.form.inputs)}",
        "responses": response_plots(fit, None, None),
        "warnings": fit.warnings,
        **_fit_parts(fit),
    }


def _prediction_content(prediction: Prediction, rig: Rig | None) -> dict[str, Any]:
    return {
        "kind": "prediction",
        "title": prediction.title,
        "headline": "What the rig file says the bench should show",
        "prediction": prediction,
        "responses": response_plots(None, prediction, None),
        "budget": budget_plot(prediction, prediction.names),
        "network": network_picture(rig) if rig is not None else "",
        "warnings": prediction.warnings,
        "records": [],
    }


def _inspection_content(found: Inspection, rig: Rig | None) -> dict[str, Any]:
    record = found.record
    return {
        "kind": "inspection",
        "title": Path(record.provenance.file or "record").name,
        "headline": "What is in the log",
        "inspection": found,
        "document": found.to_dict(),
        "records": [("", channels_plot(record, found.events))] if isinstance(record, Record) else [],
        "responses": [],
        "warnings": [{"code": code, "text": text} for code, text in found.warnings],
    }


_CONTENTS: tuple[tuple[type, Callable[[Any, Rig | None], dict[str, Any]]], ...] = (
    (Tally, _tally_content),
    (Fit, _fit_content),
    (Prediction, _prediction_content),
    (Inspection, _inspection_content),
)
