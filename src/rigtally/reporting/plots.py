"""Plots of a result as SVG text: record with fit and residual, frequency response, budget.

matplotlib's objects, no global state. Long records are drawn by their envelope, so that a report stays small.
"""

from __future__ import annotations

import io
import math
import textwrap
from collections.abc import Sequence
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray

from rigtally.estimation.result import Fit, Trace
from rigtally.physics.prediction_result import Prediction
from rigtally.tallying.comparison import ResponseComparison

Array = NDArray[np.float64]
POINTS = 1500
MEASURED, FITTED, PREDICTED, INPUT = "#7a8793", "#0b5cad", "#c2571a", "#5b8c3a"
_STYLE: Any = {
    "font.size": 9,
    "svg.fonttype": "none",
    "svg.hashsalt": "rigtally",
    "font.family": "sans-serif",
}


def svg(figure: Figure) -> str:
    """The figure as an SVG element (no XML prologue), the same bytes for the same figure."""
    import matplotlib

    stream = io.StringIO()
    with matplotlib.rc_context(_STYLE):
        figure.savefig(stream, format="svg", metadata={"Date": None, "Creator": "rigtally"})
    text = stream.getvalue()
    return text[text.index("<svg") :]


def _figure(rows: int, columns: int, width: float, height: float, **keywords: Any) -> tuple[Figure, Any]:
    figure = Figure(figsize=(width, height), layout="constrained")
    axes = figure.subplots(rows, columns, squeeze=False, **keywords)
    for axis in axes.ravel():
        axis.grid(True, color="#d8dde2", linewidth=0.6)
        for side in ("top", "right"):
            axis.spines[side].set_visible(False)
    return figure, axes


def envelope(time: Array, values: Array) -> tuple[Array, Array]:
    """At most about POINTS points that keep every extreme of the samples."""
    if time.size <= POINTS:
        return time, values
    stride = math.ceil(time.size / (POINTS // 2))
    keep: list[int] = []
    for begin in range(0, time.size, stride):
        part = values[begin : begin + stride]
        if not np.any(np.isfinite(part)):
            keep.append(begin)
            continue
        ends = sorted({int(np.nanargmin(part)), int(np.nanargmax(part))})
        keep.extend(begin + k for k in ends)
    index = np.array(keep)
    return time[index], values[index]


def record_plot(fit: Fit, trace: Trace) -> str:
    """Inputs, outputs with the fit, and what is left over, of one segment."""
    q, r = len(fit.form.outputs), len(fit.form.inputs)
    figure, axes = _figure(
        r + 2 * q, 1, 8.6, 1.15 * r + 2.6 * q, sharex=True,
        gridspec_kw={"height_ratios": [1.0] * r + [2.0, 0.8] * q},
    )  # fmt: skip
    rows = axes[:, 0]
    for j in range(r):
        rows[j].plot(*envelope(trace.time, trace.inputs[j]), color=INPUT, linewidth=1.0)
        rows[j].set_ylabel(_label(fit.form.inputs[j], fit.input_units[j]))
    for i in range(q):
        top, low = rows[r + 2 * i], rows[r + 2 * i + 1]
        top.plot(*envelope(trace.time, trace.outputs[i]), color=MEASURED, linewidth=0.8, label="logged")
        top.plot(*envelope(trace.time, trace.fitted[i]), color=FITTED, linewidth=1.2, label="fitted")
        top.set_ylabel(_label(fit.form.outputs[i], fit.output_units[i]))
        top.legend(loc="best", frameon=False, ncols=2)
        low.plot(*envelope(trace.time, trace.residual[i]), color=FITTED, linewidth=0.6)
        low.axhline(0.0, color="#333333", linewidth=0.6)
        low.set_ylabel("left over")
    rows[-1].set_xlabel("time (s)")
    return svg(figure)


def _label(name: str, unit: str) -> str:
    short = name if len(name) <= 12 else "\n".join(textwrap.wrap(name, 12)[:2])
    return f"{short}\n({unit})" if unit else short


def response_plots(
    fit: Fit | None, prediction: Prediction | None, compared: ResponseComparison | None
) -> list[tuple[str, str]]:
    """(title, SVG) of each entry: magnitude and phase, measured, fitted and predicted with 95 % bands."""
    form = fit.form if fit is not None else prediction.form if prediction is not None else None
    if form is None:
        return []
    out = []
    for i, j in form.entries:
        figure, axes = _figure(2, 1, 8.6, 4.8, sharex=True, gridspec_kw={"height_ratios": [1.5, 1.0]})
        magnitude, phase = axes[:, 0]
        if compared is not None:
            hertz = compared.frequency / (2 * math.pi)
            for gain, u, phase_u, colour, word in (
                (
                    compared.predicted,
                    compared.predicted_u,
                    compared.predicted_phase_u,
                    PREDICTED,
                    "predicted",
                ),
                (compared.fitted, compared.fitted_u, compared.fitted_phase_u, FITTED, "fitted"),
            ):
                _band(magnitude, hertz, np.abs(gain[:, i, j]), 1.96 * u[:, i, j], colour, word)
                angle = np.degrees(np.unwrap(np.angle(gain[:, i, j])))
                _band(phase, hertz, angle, np.degrees(1.96 * phase_u[:, i, j]), colour, word)
        else:
            matrix = fit.transfer_function if fit is not None else prediction.transfer_function  # type: ignore[union-attr]
            sizes = np.abs(matrix.poles[np.abs(matrix.poles) > 0])
            omega = (
                np.geomspace(sizes.min() / 30, sizes.max() * 30, 300)
                if sizes.size
                else np.geomspace(0.1, 10, 50)
            )
            gain = matrix(omega).reshape(omega.size, len(form.outputs), len(form.inputs))[:, i, j]
            word, colour = ("fitted", FITTED) if fit is not None else ("predicted", PREDICTED)
            magnitude.plot(omega / (2 * math.pi), np.abs(gain), color=colour, label=word)
            phase.plot(omega / (2 * math.pi), np.degrees(np.unwrap(np.angle(gain))), color=colour)
        if fit is not None and fit.response is not None:
            _measured(magnitude, phase, fit, i, j)
        magnitude.set_xscale("log")
        magnitude.set_yscale("log")
        unit = _gain_unit(fit, prediction, i, j)
        magnitude.set_ylabel("|G|" + (f" ({unit})" if unit else ""))
        phase.set_ylabel("phase (°)")
        phase.set_xlabel("frequency (Hz)")
        magnitude.legend(loc="best", frameon=False)
        out.append((f"{form.outputs[i]} over {form.inputs[j]}", svg(figure)))
    return out


def _band(axis: Axes, x: Array, y: Array, half: Array, colour: str, word: str) -> None:
    axis.plot(x, y, color=colour, linewidth=1.2, label=word)
    low = y - half
    if axis.get_ylabel() == "" and np.all(y > 0):
        low = np.maximum(low, y * 1e-3)
    axis.fill_between(x, low, y + half, color=colour, alpha=0.18, linewidth=0)


def _measured(magnitude: Axes, phase: Axes, fit: Fit, i: int, j: int) -> None:
    """The record's own response where it is worth showing: where the fit stands clear of its u.

    The choice looks at the fit and not at the measured gain, so that it does not prefer what chance made large.
    """
    found = fit.response
    if found is None:
        return
    size, u = np.abs(found.gain[:, i, j]), found.u[:, i, j]
    clear = np.abs(fit.transfer_function(found.frequency)).reshape(size.shape[0], -1)
    clear = clear[:, i * len(fit.form.inputs) + j]
    good = (u < 0.3 * clear) & (size > 0)
    if not np.any(good):
        return
    hertz = found.frequency[good] / (2 * math.pi)
    magnitude.errorbar(
        hertz, size[good], yerr=1.96 * u[good], fmt="o", markersize=2.2, elinewidth=0.6, color=MEASURED,
        label="measured", zorder=1,
    )  # fmt: skip
    phase.plot(
        hertz,
        np.degrees(np.unwrap(np.angle(found.gain[good, i, j]))),
        "o",
        markersize=2.2,
        color=MEASURED,
        zorder=1,
    )


def _gain_unit(fit: Fit | None, prediction: Prediction | None, i: int, j: int) -> str:
    source = fit if fit is not None else prediction
    if source is None:
        return ""
    out, into = source.output_units[i], source.input_units[j]
    return "" if out == into else f"{out or '1'} / {into or '1'}"


def budget_plot(prediction: Prediction, names: Sequence[str]) -> str:
    """Shares of the variance of each parameter by value, as bars."""
    shown = [n for n in names if any(share > 0 for _, _, share in prediction.budget.get(n, []))][:4]
    if not shown:
        return ""
    labels: list[str] = []
    for name in shown:
        for owner, key, share in prediction.budget[name]:
            label = f"{owner} {key}"
            if share > 0.005 and label not in labels:
                labels.append(label)
    figure, axes = _figure(1, len(shown), 8.6, 0.6 + 0.28 * len(labels), sharey=True)
    for axis, name in zip(axes[0], shown, strict=True):
        shares = {f"{owner} {key}": share for owner, key, share in prediction.budget[name]}
        axis.barh(labels, [100 * shares.get(label, 0.0) for label in labels], color=PREDICTED, height=0.6)
        axis.set_xlim(0, 100)
        axis.set_title(name.replace("_", " "), fontsize=9)
        axis.set_xlabel("% of the variance")
    axes[0][0].invert_yaxis()
    return svg(figure)
