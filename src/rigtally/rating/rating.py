"""What a fitted sensor may be used for: `rate`."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import FitError, UsageError
from rigtally.estimation.result import Fit
from rigtally.forms.response import gain_with_derivative
from rigtally.quantities.coverage import coverage_factor
from rigtally.quantities.uncertain import Uncertain
from rigtally.rating import features

Array = NDArray[np.float64]
DRAWS = 4000
TIME_DRAWS = 400  # settling and rise time are searched on a grid for each draw
BOTH = 0.01  # share of the draws from which a second band is given
CAUTION = (
    "Where people or plant rely on this sensor, the local code, the type approval and the judgement of a "
    "licensed person come before this rating."
)


@dataclass(frozen=True)
class FlatBand:
    """A band in which the gain stays within 1 ± limit of K, in rad/s.

    `leaves` says how the gain leaves the band: "upwards" (its resonance) or "downwards"; `probability` is the
    share of the fit's uncertainty in which it leaves that way. Both ways are given where both are likely.
    """

    limit: float
    start: Uncertain
    end: Uncertain
    leaves: str
    probability: float

    def to_dict(self) -> dict[str, Any]:
        """For JSON; an open side is null."""

        def side(x: Uncertain) -> Any:
            if math.isinf(x.value):
                return None
            return 0.0 if x.value == 0.0 and x.u == 0.0 else x.to_dict()

        return {
            "limit": self.limit,
            "from": side(self.start),
            "to": side(self.end),
            "leaves": self.leaves,
            "probability": self.probability,
        }


@dataclass(frozen=True)
class Rating:
    """The dynamic rating of a sensor.

    Attributes
    ----------
    flat_bands : tuple of FlatBand, rad/s
    bandwidth_3db : Uncertain, rad/s
    resonance : Uncertain or None
        Peak of |G|/K; None where more than half of the draws have no peak. `resonance_frequency` its ω.
    overshoot, rise_time, settling : Uncertain
        Of an ideal step (of the rate for a rate sensor); settling to `settling_band`.
    delay : Uncertain
        Group delay at low frequency, s: also how far a ramp is followed late.
    phase : mapping of limit to Uncertain
        Phase at the end of each flat band, rad.
    lowest : Uncertain or None
        Smallest input (rate, for a rate sensor) that stands out of the stated noise at 95 %.
    statement, caution : str
    """

    fit: Fit
    flat_bands: tuple[FlatBand, ...]
    bandwidth_3db: Uncertain | None
    resonance: Uncertain | None
    resonance_frequency: Uncertain | None
    overshoot: Uncertain | None
    rise_time: Uncertain | None
    settling: Uncertain | None
    settling_band: float
    delay: Uncertain | None
    phase: Mapping[float, Uncertain]
    lowest: Uncertain | None
    statement: str
    caution: str = CAUTION
    notes: tuple[str, ...] = field(default_factory=tuple)

    def to_dict(self) -> dict[str, Any]:
        """The rating as the JSON contract states it ("rigtally/rating/1")."""

        def of(x: Uncertain | None) -> Any:
            return None if x is None else x.to_dict()

        return {
            "schema": "rigtally/rating/1",
            "form": self.fit.form.name,
            "flat_bands": [band.to_dict() for band in self.flat_bands],
            "bandwidth_3db": of(self.bandwidth_3db),
            "resonance": of(self.resonance),
            "resonance_frequency": of(self.resonance_frequency),
            "overshoot": of(self.overshoot),
            "rise_time": of(self.rise_time),
            "settling": of(self.settling),
            "settling_band": self.settling_band,
            "delay": of(self.delay),
            "phase": [{"limit": limit, "phase": x.to_dict()} for limit, x in self.phase.items()],
            "lowest": of(self.lowest),
            "statement": self.statement,
            "caution": self.caution,
            "notes": list(self.notes),
        }


def rate(
    fit: Fit,
    *,
    limits: Sequence[float] = (0.01, 0.05),
    noise: float | None = None,
    settling_band: float = 0.02,
    seed: int = 0,
) -> Rating:
    """The dynamic rating of a fitted sensor of first or second order.

    Each figure is taken from draws of the fitted parameters (normal, or t with the fit's degrees of
    freedom), so that jumps (settling, the edge of a flat band near ζ 0.6 to 0.7) are told as they are; the
    95 % interval is that of equal tails.

    Parameters
    ----------
    limits : relative errors of the gain for which a flat band is given
    noise : standard deviation of the output's noise in its SI unit, for the lowest usable input
    settling_band : relative

    Raises
    ------
    UsageError
        "not-rated": several entries, or a form that is neither first nor second order.
    FitError
        "not-determined" or "unstable".
    """
    form = fit.form
    powers = form.powers[0][0]
    known = form.family in ("first-order", "second-order") and len(powers) == 1 and not form.integrators
    if not form.single or not known or powers[0] > 2 or (form.family == "first-order" and powers[0] > 1):
        raise UsageError(
            f"the form {form.name!r} has no rating of its own", where="rate",
            do="fit one output over one input with first-order, first-order-rate, second-order, "
               "second-order-rate or second-order-highpass", code="not-rated",
        )  # fmt: skip
    for share in (*limits, settling_band):
        if not 0.0 < share < 0.5:
            raise UsageError(f"a limit of {share} is not between 0 and 0.5", where="rate",
                             do="write limits=(0.01, 0.05)", code="bad-value")  # fmt: skip
    draws = _draws(fit, np.random.default_rng(seed))
    value = np.array([fit.parameters[n].value for n in fit.names])
    if form.family == "first-order":
        return _first_order(fit, value, draws, limits, noise, settling_band)
    return _second_order(fit, value, draws, limits, noise, settling_band)


def _draws(fit: Fit, rng: np.random.Generator) -> Array:
    """(m, p) parameter vectors that the log allows: those of a stable sensor."""
    names = [n for n in fit.names if n not in fit.held]
    lost = [n for n in names if not fit.parameters[n].determined]
    if lost:
        raise FitError("the log does not determine " + ", ".join(lost), where="rate",
                       do="rate a fit that does, or hold it at a known value", code="not-determined")  # fmt: skip
    value = np.array([fit.parameters[n].value for n in fit.names])
    shared = [k for k, n in enumerate(fit.names) if n in fit.form.shared_names]
    if np.any(value[shared] <= 0):
        raise FitError("the fitted sensor is unstable", where="rate", do="look at the fit first", code="unstable")
    size = np.where(value != 0, np.abs(value), 1.0)
    values, vectors = np.linalg.eigh(fit.covariance / np.outer(size, size))
    root = size[:, None] * vectors * np.sqrt(np.clip(values, 0.0, None))
    dof = min(x.dof for x in fit.parameters.values())
    z = rng.standard_normal((DRAWS, value.size))
    if math.isfinite(dof):
        z = z / np.sqrt(np.asarray(rng.chisquare(dof, DRAWS)) / dof)[:, None]
    out: Array = value + z @ root.T
    return out[np.all(out[:, shared] > 0, axis=1)]


def _told(value: float, drawn: Array, unit: str) -> Uncertain:
    """A figure with the 95 % interval of its draws."""
    good = drawn[np.isfinite(drawn)]
    if good.size < 2:
        return Uncertain(value, math.nan, unit)
    low, high = np.quantile(good, [0.025, 0.975])
    spread = float(good.std(ddof=1))
    return Uncertain(value, spread, unit, limits95=(float(low), float(high)))


def _exact(value: float, unit: str = "rad/s") -> Uncertain:
    return Uncertain(value, 0.0, unit, distribution="exact")


def _first_order(
    fit: Fit, value: Array, draws: Array, limits: Sequence[float], noise: float | None, band: float
) -> Rating:
    """Closed forms of K/(τs + 1): all smooth in τ."""
    k = fit.names.index("time_constant")
    tau, every = float(value[k]), draws[:, k]

    def edge(limit: float) -> float:
        return math.sqrt((1.0 - limit) ** -2 - 1.0)  # |1/(1 + jωτ)| = 1 − limit

    bands = tuple(
        FlatBand(x, _exact(0.0), _told(edge(x) / tau, edge(x) / every, "rad/s"), "downwards", 1.0) for x in limits
    )
    dead, dead_drawn = _dead(fit, value, draws)
    return Rating(
        fit=fit,
        flat_bands=bands,
        bandwidth_3db=_told(1.0 / tau, 1.0 / every, "rad/s"),
        resonance=None,
        resonance_frequency=None,
        overshoot=_exact(0.0, ""),
        rise_time=_told(math.log(9.0) * tau, math.log(9.0) * every, "s"),
        settling=_told(-math.log(band) * tau + dead, -math.log(band) * every + dead_drawn, "s"),
        settling_band=band,
        delay=_told(tau + dead, every + dead_drawn, "s"),
        phase=_phases(fit, bands, value),
        lowest=_lowest(fit, noise),
        statement=_statement(fit, bands),
        notes=_notes(fit, bands),
    )


def _second_order(
    fit: Fit, value: Array, draws: Array, limits: Sequence[float], noise: float | None, band: float
) -> Rating:
    w_at, z_at = fit.names.index("natural_frequency"), fit.names.index("damping_ratio")
    wn, zeta = float(value[w_at]), float(value[z_at])
    all_w, all_z = draws[:, w_at], draws[:, z_at]
    high = fit.form.is_highpass(0, 0)
    bands = tuple(b for x in limits for b in _bands(x, wn, zeta, all_w, all_z, high))
    peak, where = features.resonance(np.array(wn), np.array(zeta))
    peaks, wheres = features.resonance(all_w, all_z)
    peaked = bool(np.isfinite(peak)) and float(np.mean(np.isfinite(peaks))) > 0.5
    three = _flip(wn, features.bandwidth_3db(np.array(wn), np.array(zeta)), high)
    threes = _flip(all_w, features.bandwidth_3db(all_w, all_z), high)
    if high and peaked:
        where, wheres = wn**2 / where, all_w**2 / wheres
    dead, dead_drawn = _dead(fit, value, draws)
    few_w, few_z = all_w[:TIME_DRAWS], all_z[:TIME_DRAWS]
    settle = rise = delay = over = None
    if not high:  # a highpass passes the step itself and returns to zero: these words do not apply
        settle = _told(
            float(features.settling(np.array([wn]), np.array([zeta]), band)[0]) + dead,
            features.settling(few_w, few_z, band) + dead_drawn[:TIME_DRAWS],
            "s",
        )
        rise = _told(
            float(features.rise_time(np.array([wn]), np.array([zeta]))[0]), features.rise_time(few_w, few_z), "s"
        )
        delay = _told(2.0 * zeta / wn + dead, 2.0 * all_z / all_w + dead_drawn, "s")
        over = _told(float(features.overshoot(np.array(zeta))), features.overshoot(all_z), "")
    return Rating(
        fit=fit,
        flat_bands=bands,
        bandwidth_3db=_told(float(three), threes, "rad/s"),
        resonance=_told(float(peak), peaks, "") if peaked else None,
        resonance_frequency=_told(float(where), wheres, "rad/s") if peaked else None,
        overshoot=over,
        rise_time=rise,
        settling=settle,
        settling_band=band,
        delay=delay,
        phase=_phases(fit, bands, value),
        lowest=_lowest(fit, noise),
        statement=_statement(fit, bands),
        notes=_notes(fit, bands),
    )


def _flip(wn: Any, edge: Any, high: bool) -> Any:
    """A highpass is the lowpass mirrored about ωn: ω → ωn²/ω."""
    return wn**2 / edge if high else edge


def _bands(limit: float, wn: float, zeta: float, all_w: Array, all_z: Array, high: bool) -> list[FlatBand]:
    """The flat band; two of them where the gain may leave either way."""
    edges, up = features.band_edge(all_w, all_z, limit)
    edges = _flip(all_w, edges, high)
    best, best_up = features.band_edge(np.array(wn), np.array(zeta), limit)
    out = []
    for way in (True, False):
        share = float(np.mean(up == way))
        if bool(best_up) != way and share < BOTH:
            continue
        drawn = edges[up == way]
        nominal = float(_flip(wn, best, high)) if bool(best_up) == way else float(np.median(drawn))
        edge = _told(nominal, drawn, "rad/s")
        start, end = (edge, _exact(math.inf)) if high else (_exact(0.0), edge)
        out.append(FlatBand(limit, start, end, "upwards" if way else "downwards", share))
    return sorted(out, key=lambda b: -b.probability)


def _dead(fit: Fit, value: Array, draws: Array) -> tuple[float, Array]:
    if not fit.form.dead_time:
        return 0.0, np.zeros(draws.shape[0])
    return float(value[-1]), draws[:, -1]


def _phases(fit: Fit, bands: Sequence[FlatBand], value: Array) -> dict[float, Uncertain]:
    """Phase of G over the sign of K at the edge of the first band of each limit, first order in θ."""
    out: dict[float, Uncertain] = {}
    for band in bands:
        edge = band.end if math.isfinite(band.end.value) else band.start
        if band.limit in out:
            continue
        gain, slope = gain_with_derivative(fit.form, value, np.array([edge.value]))
        power = fit.form.powers[0][0][0]
        turned = gain[0, 0, 0] / (1j**power * np.sign(value[0]))
        by = (slope[0, 0, 0] / gain[0, 0, 0]).imag
        u = math.sqrt(max(0.0, float(by @ fit.covariance @ by)))
        out[band.limit] = Uncertain(float(np.angle(turned)), u, "rad")
    return out


def _lowest(fit: Fit, noise: float | None) -> Uncertain | None:
    """Input that equals the 95 % half-width of the output's noise: 1.96·s/|K|."""
    if noise is None:
        return None
    if not noise >= 0:
        raise UsageError(f"noise = {noise} is below 0", where="rate", do="state its standard deviation",
                         code="bad-value")  # fmt: skip
    gain = fit.parameters["gain"]
    size = coverage_factor(0.95) * noise / abs(gain.value)
    unit = fit.input_units[0] if fit.input_units else ""
    return Uncertain(size, size * gain.u / abs(gain.value), unit, gain.dof)


def _statement(fit: Fit, bands: Sequence[FlatBand]) -> str:
    """For the widest limit: the band that holds with 95 % (one-sided 97.5 %) whichever way the gain leaves."""
    widest = max(b.limit for b in bands)
    those = [b for b in bands if b.limit == widest]
    what = "the output is the rate of the input" if fit.form.powers[0][0] == (1,) else "usable"
    if math.isinf(those[0].end.value):
        low = max(b.start.interval()[1] for b in those) / (2.0 * math.pi)
        return f"{what} from {low:.4g} Hz upwards with at most {100 * widest:.3g} % error of the gain at 95 %"
    high = min(b.end.interval()[0] for b in those) / (2.0 * math.pi)
    return f"{what} from 0 to {high:.4g} Hz with at most {100 * widest:.3g} % error of the gain at 95 %"


def _notes(fit: Fit, bands: Sequence[FlatBand]) -> tuple[str, ...]:
    out = []
    for limit in sorted({b.limit for b in bands}):
        if sum(b.limit == limit for b in bands) > 1:
            out.append(
                f"the ±{100 * limit:.3g} % band jumps within the fit's uncertainty: the gain may leave it upwards "
                "or downwards; both bands are given"
            )
    if fit.form.powers[0][0] == (1,):
        out.append("seat of the error: the sensor's own lag, which grows with the frequency of the rate")
    if fit.interval > 0:
        nyquist = math.pi / fit.interval
        far = max((b.end.value for b in bands if math.isfinite(b.end.value)), default=0.0)
        if far > nyquist:
            out.append("a band reaches beyond half the log's sampling rate: it rests on the form, not on the log")
    return tuple(out)
