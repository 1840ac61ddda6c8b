"""The door to estimation: `fit` takes records or arrays and gives a `Fit`."""

from __future__ import annotations

import importlib
from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any, Literal, cast

import numpy as np
from numpy.typing import ArrayLike, NDArray

from rigtally.errors import FitError, RigtallyError, UsageError
from rigtally.estimation.arrange import Arranged, from_arrays, from_records, unlogged_test
from rigtally.estimation.assemble import assemble
from rigtally.estimation.drift import drift_found
from rigtally.estimation.findings import between_findings, residual_findings, sampling_findings
from rigtally.estimation.result import Fit, RoadResult, Warning_
from rigtally.estimation.trial import Trial
from rigtally.forms.named import Form
from rigtally.forms.named import form as named_form
from rigtally.records.record import Record, Response

Array = NDArray[np.float64]
_ROADS = {
    "time": ("rigtally.estimation.time_domain", "fit_time"),
    "frequency": ("rigtally.estimation.frequency_domain", "fit_frequency"),
}
LONG = 5_000  # samples beyond which the time road checks from where the frequency road ended
_OTHER = {"time": "frequency", "frequency": "time"}


def fit(
    record: Record | Response | Sequence[Record | Response] | None = None,
    *,
    inputs: str | Sequence[str] | None = None,
    outputs: str | Sequence[str] | None = None,
    input: ArrayLike | None = None,
    output: ArrayLike | None = None,
    interval: float | None = None,
    form: str | Form = "second-order",
    road: str = "frequency",
    between: str = "ramped",
    output_first: bool = False,
    dead_time: bool = False,
    offset: float | str = "free",
    drift: str | None = None,
    start: str = "free",
    noise: float | str = "estimated",
    set: Mapping[str, float] | None = None,
    range: Mapping[str, tuple[float, float]] | None = None,
    tie: Mapping[str, str] | None = None,
    step_at: float | None = None,
    step_size: str | float | None = None,
    release_at: float | None = None,
    pulse_at: float | None = None,
    pulse_area: str | float | None = None,
    checks: str = "all",
    seed: int = 0,
) -> Fit:
    """Fit a low-order transfer function or matrix to a log; nobody is asked for a start value.

    Model: y(t) = G(s; θ) u(t) + offset + drift·t + free response + noise, G of the stated form, one denominator for
    all outputs and inputs. Offset, drift and the initial state are solved in closed form; θ by output-error
    least squares, that is maximum likelihood for Gaussian noise, its colour estimated from the residual.

    Parameters
    ----------
    record : Record, sequence of Records, or Response
        Several records are repeats of one test: they share θ, each has its own offset, drift and start. A measured
        frequency response is fitted as such; of the keywords, form, dead_time, set, range and tie apply to it.
    inputs, outputs : str or sequence of str
        Channels.
    input, output : (n,) or (channels, n) arrays, with `interval` in seconds
        Instead of a record; taken as SI.
    form : str or Form
        A name of the forms' table, or a Form (a rig's, say).
    road : "frequency", "time" or "both"
        Whose numbers stand in the result; the other road checks them. "both" prints the frequency road's.
    between : "ramped", "held" or "band-limited"
        What the input does between its samples.
    offset : "free" or number (SI); drift : "free", "none" or None (none unless a test finds one)
    start : "free" or "rest"
    noise : "estimated", "white", or the standard uncertainty of one output sample (SI)
    set, range, tie : held values, bounds, expressions by parameter name
    step_at, step_size, release_at, pulse_at, pulse_area
        Tests whose input is not logged: seconds, and a size with its unit ("20 kPa").
    checks : "all" or "none"
        "none" leaves out the other road and the other assumption on the input.
    seed : int
        Kept with the result; the fit itself draws nothing.

    Returns
    -------
    Fit
        `parameters[name].value`, `.u`, `.interval(0.95)`; `covariance` (p, p); `transfer_function`.

    Raises
    ------
    UsageError, LogError, FitError
        What is wrong, where, and what to do.

    Notes
    -----
    Ljung, System Identification (1999); Pintelon & Schoukens, System Identification: A Frequency Domain Approach
    (2012), end terms of a record; Golub & Pereyra (1973), variable projection (all from memory).
    """
    responses = [
        r for r in ([record] if not isinstance(record, Sequence) else record) if isinstance(r, Response)
    ]
    if responses:
        return _of_response(responses, form, dead_time, set, range, tie)
    test = unlogged_test(step_at, step_size, release_at, pulse_at, pulse_area)
    if record is None:
        if output is None:
            raise UsageError(
                "there is nothing to fit", do="give a record, or input=, output=, interval=", code="no-log"
            )
        arranged = from_arrays(input, output, interval, test)
    else:
        records = cast(list[Record], [record] if not isinstance(record, Sequence) else list(record))
        arranged = from_records(records, _names(inputs), _names(outputs), test)
    chosen = _form(form, arranged, dead_time)
    trial = _trial(
        chosen, arranged, between, output_first, offset, drift, start, noise, seed, set, range, tie
    )
    primary = "frequency" if road == "both" else road
    if primary not in _ROADS:
        raise UsageError(
            f"road {road!r} is not known", do="choose time, frequency or both", code="unknown-road"
        )
    return _taken(trial, arranged, primary, checks != "none", drift is None)


def _of_response(
    responses: Sequence[Response],
    form: str | Form,
    dead_time: bool,
    held: Mapping[str, float] | None,
    ranges: Mapping[str, tuple[float, float]] | None,
    ties: Mapping[str, str] | None,
) -> Fit:
    """One measured frequency response."""
    from rigtally.estimation.response_fit import fit_response

    if len(responses) > 1:
        raise UsageError(
            f"{len(responses)} response tables were given", do="give one at a time", code="one-response"
        )
    one = responses[0]
    shape = form if isinstance(form, Form) else named_form(form, dead_time=dead_time)
    if isinstance(form, Form) and dead_time:
        shape = form.with_dead_time()
    if (len(shape.outputs), len(shape.inputs)) != one.gain.shape[1:]:
        raise UsageError(
            f"the form has {len(shape.outputs)} outputs and {len(shape.inputs)} inputs, the table "
            f"{one.gain.shape[1]} and {one.gain.shape[2]}",
            where=one.provenance.file,
            do="choose a form of the same shape",
            code="bad-shape",
        )
    for name in {**(held or {}), **(ranges or {}), **(ties or {})}:
        if name not in shape.names:
            raise UsageError(
                f"the form {shape.name} has no parameter {name!r}",
                do="it has: " + ", ".join(shape.names),
                code="unknown-parameter",
            )
    return fit_response(one, shape, held=held, ranges=ranges, ties=ties)


def _taken(trial: Trial, arranged: Arranged, primary: str, checked: bool, look_for_drift: bool) -> Fit:
    """Take the road, the other one as a check, and gather what there is to say."""
    notes = [Warning_(code, text) for code, text in arranged.notes]
    result, taken, said = _first_road(trial, primary)
    notes += said
    if look_for_drift and trial.noise == "estimated":
        slope = drift_found(trial, result)
        if slope is not None:
            drifting = replace(trial, drift=True)
            try:
                result, taken, _ = _first_road(drifting, taken)
                trial = drifting
                notes.append(slope)
            except FitError:
                pass
    other = None
    if checked and taken == primary:
        other, said = _second_road(trial, _OTHER[taken], result)
        notes += said
        notes += _other_assumption(trial, result, taken)
    if checked:
        notes += residual_findings(trial, trial.segments, result)
        notes += sampling_findings(trial.form, result.theta, trial.segments[0].interval, trial.between)
    return assemble(trial, arranged, taken, result, other, notes)


def _take(road: str, trial: Trial, **more: Any) -> RoadResult:
    """One road's result; a fault of its own is a refusal like any other."""
    module, name = _ROADS[road]
    try:
        return cast(RoadResult, getattr(importlib.import_module(module), name)(trial, **more))
    except RigtallyError:
        raise
    except Exception as fault:
        raise FitError(
            f"the {road} road failed ({type(fault).__name__}: {' '.join(str(fault).split())[:120]})",
            do="try the other road with --road",
            code="road-failed",
        ) from fault


def _first_road(trial: Trial, road: str) -> tuple[RoadResult, str, list[Warning_]]:
    """The wished road, or the other one where that cannot serve, and it is said."""
    try:
        return _take(road, trial), road, []
    except FitError as refusal:
        other = _OTHER[road]
        try:
            result = _take(other, trial)
        except FitError:
            raise refusal from None
        code = "other-road-taken" if refusal.code == "road-unfit" else "other-road-failed"
        text = (
            f"the {road} road cannot serve ({refusal.what}); these are the {other} road's numbers, unchecked"
        )
        return result, other, [Warning_(code, text)]


def _second_road(trial: Trial, road: str, first: RoadResult) -> tuple[RoadResult | None, list[Warning_]]:
    """The other road as a check: from its own start, or on a very long record from where the first one ended."""
    long = sum(segment.count for segment in trial.segments) > LONG
    near = {"start": first.theta} if road == "time" and long and np.all(np.isfinite(first.theta)) else {}
    try:
        return _take(road, trial, **near), []
    except FitError as refusal:
        if refusal.code == "road-unfit":
            return None, []
        return None, [Warning_("other-road-failed", f"the {road} road gave no check: {refusal.what}")]


def _other_assumption(trial: Trial, result: RoadResult, road: str) -> list[Warning_]:
    """The same fit with the input taken otherwise between its samples."""
    if trial.segments[0].excitation != "logged" or trial.between == "band-limited":
        return []
    word = "held" if trial.between == "ramped" else "ramped"
    if not np.all(np.isfinite(result.theta)):
        return []
    long = sum(segment.count for segment in trial.segments) > LONG
    otherwise = replace(trial, between=cast(Any, word))
    try:
        # a long record is followed from where the fit ended, by the road that takes a start
        other = _take("time", otherwise, start=result.theta) if long else _take(road, otherwise)
    except FitError:
        return []
    return between_findings(trial, result, other, word)


def _names(names: str | Sequence[str] | None) -> list[str]:
    if names is None:
        return []
    return [names] if isinstance(names, str) else list(names)


def _form(form: str | Form, arranged: Arranged, dead_time: bool) -> Form:
    """The form between the channels of this log."""
    outputs, inputs = arranged.output_names, arranged.input_names
    if isinstance(form, Form):
        if (len(form.outputs), len(form.inputs)) != (len(outputs), len(inputs)):
            raise UsageError(
                f"the form has {len(form.outputs)} outputs and {len(form.inputs)} inputs, "
                f"the log {len(outputs)} and {len(inputs)}",
                do="name the channels with --input and --output",
                code="bad-shape",
            )
        return form.with_dead_time() if dead_time else form
    one = named_form(form, dead_time=dead_time)
    if not outputs or not inputs:
        raise UsageError("no channels are named", do="name inputs and outputs", code="which-channel")
    if len(outputs) == len(inputs) == 1:
        return one.with_names(outputs, inputs)
    powers = tuple(tuple(one.powers[0][0] for _ in inputs) for _ in outputs)
    return replace(one, name="matrix", powers=powers, outputs=tuple(outputs), inputs=tuple(inputs))


def _trial(
    form: Form, arranged: Arranged, between: str, output_first: bool, offset: float | str, drift: str | None,
    start: str, noise: float | str, seed: int, held: Mapping[str, float] | None,
    ranges: Mapping[str, tuple[float, float]] | None, ties: Mapping[str, str] | None,
) -> Trial:  # fmt: skip
    """Check the words and put the trial together."""
    for name, word, known in (
        ("between", between, ("held", "ramped", "band-limited")),
        ("drift", drift or "none", ("free", "none")),
        ("start", start, ("free", "rest")),
    ):
        if word not in known:
            raise UsageError(
                f"{name} = {word!r} is not known", do=f"choose {', '.join(known)}", code="bad-option"
            )
    if isinstance(noise, str) and noise not in ("estimated", "white"):
        raise UsageError(
            f"noise = {noise!r} is not known", do="choose estimated, white or a number", code="bad-option"
        )
    if isinstance(offset, str) and offset != "free":
        raise UsageError(f"offset = {offset!r} is not known", do="choose free or a number", code="bad-option")
    for option, given in (("set", held), ("range", ranges), ("tie", ties)):
        for name in given or {}:
            if name not in form.names:
                raise UsageError(
                    f"--{option}: the form {form.name} has no parameter {name!r}",
                    do="it has: " + ", ".join(form.names),
                    code="unknown-parameter",
                )
    return Trial(
        form=form,
        segments=arranged.segments,
        between=cast(Literal["held", "ramped", "band-limited"], between),
        output_first=output_first,
        offset=cast(Any, offset),
        drift=drift == "free",
        rest=start == "rest",
        noise=cast(Any, noise),
        held=dict(held or {}),
        ranges=dict(ranges or {}),
        ties=dict(ties or {}),
        seed=seed,
    )
