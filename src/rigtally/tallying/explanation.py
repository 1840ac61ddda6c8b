"""Which element explains a difference.

A value's tolerance is lifted, that of all others is kept, and the rig is solved again, without
linearising, for the position of the lifted value that leaves the smallest joint distance.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from rigtally.physics.prediction_result import Prediction
from rigtally.quantities.uncertain import Uncertain
from rigtally.tallying.agreement import Metric, metric
from rigtally.tallying.difference import Difference
from rigtally.tallying.troubles import trouble

Array = NDArray[np.float64]
SAME_LEFT = 2.0  # remainders that differ by less cannot be told apart
SAME_ANGLE = math.radians(5.0)
FARTHEST = math.log(1e4)  # no value is sought beyond 10⁴ times, or a 10⁴th of, what is stated
SOFT_PRIOR = 0.05  # relative u that orders values taken as exact among their equals
PAIRS_OF = 40
NOT_LIFTED = ("friction model", "gravity")
REJECTED = 0.01  # a remainder that chance exceeds more seldom calls for more than this explanation


@dataclass(frozen=True)
class Explanation:
    """Values that, moved together, make fit and prediction tally.

    Attributes
    ----------
    elements : tuple of str
    change : tuple of float
        Relative to the stated value (NaN where that is 0).
    in_u : tuple of float
        In the value's own standard uncertainty; NaN for a value taken as exact.
    chi2_left : float
        Joint distance that is left; `p` the probability of a larger one by chance (NaN where no
        direction is left to test).
    indistinguishable : tuple of str
        Values, or pairs as "a & b", that the log cannot tell apart from these.
    sufficient : bool
        Whether chance could have left that much.
    trouble : str
        What the trade would look for.
    """

    elements: tuple[str, ...]
    change: tuple[float, ...]
    in_u: tuple[float, ...]
    chi2_left: float
    p: float
    indistinguishable: tuple[str, ...]
    sufficient: bool
    trouble: str

    def to_dict(self) -> dict[str, Any]:
        """For JSON."""
        return {
            "elements": list(self.elements),
            "change": [_finite(x) for x in self.change],
            "in_u": [_finite(x) for x in self.in_u],
            "chi2_left": self.chi2_left,
            "p": _finite(self.p),
            "sufficient": self.sufficient,
            "indistinguishable": list(self.indistinguishable),
            "trouble": self.trouble,
        }


@dataclass(frozen=True)
class _Lifted:
    """A solved explanation before it is grouped."""

    which: tuple[int, ...]
    values: Array
    left: float
    unlikely: float


def explain(d: Difference, prediction: Prediction, m: Metric, keep: int = 8) -> tuple[Explanation, ...]:
    """Ranked explanations, best first; each group of values that cannot be told apart stands once.

    Single values come first, unless the best of them leaves a distance that chance exceeds in less than
    1 % and some pair does not: a shift in two values is not passed off as one. The order of the elements and
    their names change nothing (exact ties aside).
    """
    if not d.names or not m.rank:
        return ()
    lift = _Lift(d, prediction)
    movable = [k for k in range(len(d.values)) if lift.moves(k, m)]
    singles = [found for k in movable if (found := lift.solve((k,))) is not None]
    strongest = sorted(movable, key=lambda k: -lift.weight(k, m))[:PAIRS_OF]
    best = min((s.left for s in singles), default=math.inf)
    pairs: list[_Lifted] = []
    if best > _bound(m.rank - 1) and m.rank >= 2:
        rough = sorted(itertools.combinations(strongest, 2), key=lift.linear_left)[:12]
        pairs = [found for pair in rough if (found := lift.solve(pair)) is not None]
        pairs = [pair for pair in pairs if pair.left <= _bound(m.rank - 2) and best - pair.left > 4.0]
    groups = [*_groups(pairs, lift, m), *_groups(singles, lift, m)]
    return tuple(_explanation(group, d, prediction, m) for group in groups[:keep])


def _bound(dof: int) -> float:
    """What chance leaves in all but 1 % (with no direction left, only arithmetic)."""
    return float(stats.chi2.isf(REJECTED, dof)) if dof > 0 else 1e-6


class _Lift:
    """Solves the rig for lifted values, with the other tolerances in the metric."""

    def __init__(self, d: Difference, prediction: Prediction) -> None:
        self.d = d
        self.prediction = prediction
        self.nominal = np.array([x.value for x in prediction.inputs], dtype=float)
        self.u = np.array([x.u for x in prediction.inputs], dtype=float)
        self.fixed = d.covariance - d.tolerance + np.diag((1e-8 * d.scale) ** 2)

    def moves(self, k: int, m: Metric) -> bool:
        """Whether a value may be lifted, and moves a compared parameter at all."""
        name = self.prediction.input_names[k]
        if name.rsplit(".", 1)[-1] in NOT_LIFTED:
            return False
        return self.weight(k, m) > 1e-3

    def weight(self, k: int, m: Metric) -> float:
        """How far the value, doubled, would move the parameters in the joint metric."""
        size = max(abs(float(self.nominal[k])), float(self.u[k]))
        return float(np.linalg.norm(m.root @ self.d.by_value[:, k]) * size)

    def likely_u(self, k: int) -> float:
        """The value's u; for one taken as exact a weak stand-in that only orders equals."""
        return float(self.u[k]) if self.u[k] > 0 else SOFT_PRIOR * max(abs(float(self.nominal[k])), 1e-300)

    def _metric(self, which: tuple[int, ...], slopes: Array) -> Metric:
        others = [k for k in range(self.u.size) if k not in which and self.u[k] > 0]
        parts = slopes[:, others] * self.u[others]
        return metric(self.fixed + parts @ parts.T, self.d.scale)

    def linear_left(self, which: tuple[int, ...]) -> float:
        """Joint distance left with the rig linear in its values."""
        root = self._metric(which, self.d.by_value).root
        a, b = root @ self.d.by_value[:, which], root @ self.d.value
        a = a / np.maximum(np.linalg.norm(a, axis=0), 1e-300)
        step = np.linalg.lstsq(a, b, rcond=1e-9)[0]
        return float(np.sum((b - a @ step) ** 2))

    def _slopes(self, x: Array) -> Array:
        differentiate = self.prediction.differentiate
        if differentiate is None:
            return self.d.by_value
        found = np.asarray(differentiate(x), dtype=float)[list(self.d.rows)]
        return np.where(np.isfinite(found), found, 0.0)

    def solve(self, which: tuple[int, ...], rounds: int = 30) -> _Lifted | None:
        """Gauss–Newton on ln(value) (on the value where it is 0), with step halving."""
        free = list(which)
        x = self.nominal.copy()
        start = self.nominal[free]
        logs = start != 0.0
        q = np.zeros(len(free))
        left, slopes, root = self._left(which, x)
        if not math.isfinite(left):
            return None
        for _ in range(rounds):
            residual = root @ (self.d.fitted - self._at(x))
            by_q = (root @ slopes[:, free]) * np.where(logs, x[free], 1.0)
            size = np.maximum(np.linalg.norm(by_q, axis=0), 1e-300)
            step = np.linalg.lstsq(by_q / size, residual, rcond=1e-9)[0] / size
            step = np.where(logs, np.clip(step, -1.0, 1.0), step)
            if np.sum((by_q @ step) ** 2) < 1e-9 * (1.0 + left):
                break
            moved = False
            for half in range(12):
                trial_q = q + step * 0.5**half
                trial = x.copy()
                trial[free] = np.where(logs, start * np.exp(np.where(logs, trial_q, 0.0)), trial_q)
                now, new_slopes, new_root = self._left(which, trial)
                if now < left:
                    gained, q, x, left, slopes, root = left - now, trial_q, trial, now, new_slopes, new_root
                    moved = True
                    break
            if not moved or gained < 1e-7 * (1.0 + left) or np.any(np.abs(q[logs]) > FARTHEST):
                break
        unlikely = sum(((x[k] - self.nominal[k]) / self.likely_u(k)) ** 2 for k in free)
        return _Lifted(which, x[free], left, float(unlikely))

    def _at(self, x: Array) -> Array:
        return np.asarray(self.prediction.evaluate(x), dtype=float)[list(self.d.rows)]

    def _left(self, which: tuple[int, ...], x: Array) -> tuple[float, Array, Array]:
        there = self._at(x)
        if not np.all(np.isfinite(there)):
            return math.inf, self.d.by_value, np.eye(self.d.scale.size)
        slopes = self._slopes(x)
        root = self._metric(which, slopes).root
        return float(np.sum((root @ (self.d.fitted - there)) ** 2)), slopes, root


def _groups(found: list[_Lifted], lift: _Lift, m: Metric) -> list[list[_Lifted]]:
    """Groups, best first: the least remainder leads, and takes in what cannot be told apart from it."""
    waiting = sorted(found, key=lambda item: (item.left, item.unlikely))
    out = []
    while waiting:
        best = waiting[0]
        group = [x for x in waiting if x.left - best.left < SAME_LEFT or _parallel(x, best, lift, m)]
        taken = {item.which for item in group}
        waiting = [x for x in waiting if x.which not in taken]
        # among equals the value that need move least in its own u leads
        out.append(sorted(group, key=lambda item: item.unlikely))
    return out


def _parallel(a: _Lifted, b: _Lifted, lift: _Lift, m: Metric) -> bool:
    """Whether two single values push the parameters in the same direction, within 5°."""
    if len(a.which) > 1 or len(b.which) > 1:
        return False
    first, second = (m.root @ lift.d.by_value[:, item.which[0]] for item in (a, b))
    size = float(np.linalg.norm(first) * np.linalg.norm(second))
    return size > 0 and abs(float(first @ second)) >= math.cos(SAME_ANGLE) * size


def _explanation(group: Iterable[_Lifted], d: Difference, prediction: Prediction, m: Metric) -> Explanation:
    lead, *others = group
    inputs: list[Uncertain] = [prediction.inputs[k] for k in lead.which]
    moved = [float(v) - x.value for v, x in zip(lead.values, inputs, strict=True)]
    change = tuple(
        delta / abs(x.value) if x.value else math.nan for delta, x in zip(moved, inputs, strict=True)
    )
    in_u = tuple(delta / x.u if x.u > 0 else math.nan for delta, x in zip(moved, inputs, strict=True))
    names = [" & ".join(prediction.input_names[k] for k in item.which) for item in others]
    dof = m.rank - len(lead.which)
    texts = [trouble(prediction.input_names[k], delta) for k, delta in zip(lead.which, moved, strict=True)]
    return Explanation(
        elements=tuple(prediction.input_names[k] for k in lead.which),
        change=change,
        in_u=in_u,
        chi2_left=lead.left,
        p=float(stats.chi2.sf(lead.left, dof)) if dof > 0 else math.nan,
        indistinguishable=tuple(names),
        sufficient=lead.left <= _bound(dof),
        trouble="; ".join(text for text in texts if text),
    )


def _finite(x: float) -> float | None:
    return x if math.isfinite(x) else None
