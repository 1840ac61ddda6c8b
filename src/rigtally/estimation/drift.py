"""Is there a straight drift in what the fit leaves over?"""

from __future__ import annotations

import math

import numpy as np

from rigtally.estimation.result import RoadResult, Warning_
from rigtally.estimation.trial import Trial

CLEAR = 6.0  # standard uncertainties of the slope


def drift_found(trial: Trial, result: RoadResult) -> Warning_ | None:
    """A warning where a straight line through the residual has a slope beyond CLEAR times its u.

    The line is tested on block means as long as the residual's memory, so that coloured noise is not taken for
    a drift. Not tested where a drift is fitted already, or the test's input is not logged.
    """
    if trial.drift or trial.offset != "free":
        return None
    for i, name in enumerate(trial.form.outputs):
        for segment, fitted in zip(trial.segments, result.fitted, strict=True):
            if segment.excitation != "logged":
                continue
            rest = segment.outputs[i] - fitted[i]
            there = np.isfinite(rest)
            rest, time = rest[there], segment.time[there]
            share = result.effective_samples[i] / max(sum(s.count for s in trial.segments), 1)
            blocks = int(min(rest.size * min(share, 1.0), 200))
            if blocks < 20:
                continue
            cut = rest.size // blocks * blocks
            means = rest[:cut].reshape(blocks, -1).mean(axis=1)
            at = time[:cut].reshape(blocks, -1).mean(axis=1)
            at = at - at.mean()
            slope = float(at @ means / (at @ at))
            left = means - means.mean() - slope * at
            u = math.sqrt(float(left @ left) / (blocks - 2) / float(at @ at))
            if u > 0 and abs(slope) > CLEAR * u:
                return Warning_(
                    "drift",
                    f"{name} drifts by {slope:.3g} (SI) a second, {abs(slope) / u:.0f} times its u; a straight drift "
                    "is fitted too (--drift none leaves it out)",
                )
    return None
