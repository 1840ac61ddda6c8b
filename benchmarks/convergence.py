"""Does the fit find its minimum without a start? Random records, cost reached against cost reached from the truth.

    python benchmarks/convergence.py --road time --records 3000 --first 0

Records: ωn over four decades against the record's length, ζ 0.02 to 2, noise up to 10 %, 300 to 20 000 samples, the
log starting in mid-transient, offset, drift, step and noise excitation. Prints every exception by its seed.
On the frequency road there is no start to give: its answer is judged by the time road's cost of it.
"""

from __future__ import annotations

import argparse
import sys
import time
from dataclasses import dataclass

import numpy as np

from rigtally.errors import FitError
from rigtally.estimation.result import RoadResult
from rigtally.estimation.time_domain import fit_time
from rigtally.estimation.time_problem import Problem
from rigtally.estimation.trial import Segment, Trial
from rigtally.forms.named import form
from rigtally.forms.simulate import simulate


@dataclass(frozen=True)
class Made:
    """A random record and the truth behind it."""

    trial: Trial
    truth: np.ndarray


def random_record(seed: int, longest: int = 20_000) -> Made:
    """The record of one seed."""
    rng = np.random.default_rng([77, seed])
    count = round(float(np.exp(rng.uniform(np.log(300), np.log(longest)))))
    interval = 1e-3
    # from a quarter of a period in the record to four samples a period
    slowest, fastest = 0.5 * np.pi / (count * interval), 0.5 * np.pi / interval
    frequency = float(np.exp(rng.uniform(np.log(max(slowest, fastest * 1e-4)), np.log(fastest))))
    damping = float(np.exp(rng.uniform(np.log(0.02), np.log(2.0))))
    gain = float(rng.choice([-1, 1]) * np.exp(rng.uniform(-3, 3)))
    theta = np.array([gain, frequency, damping])
    before = count // 3  # cut off: the log starts in mid-transient
    if rng.random() < 0.5:
        u = np.repeat(rng.normal(size=6), -(-(count + before) // 6))[: count + before]
    else:
        u = rng.normal(size=count + before)
    shape = form("second-order")
    y = simulate(shape.transfer_matrix(theta), u, interval)[before:]
    u = u[before:]
    size = float(np.std(y)) or 1.0
    y = y + size * (rng.uniform(-5, 5) + rng.uniform(-1, 1) * np.linspace(0, 1, count))
    y = y + size * float(rng.uniform(1e-4, 0.1)) * rng.normal(size=count)
    segment = Segment(f"seed {seed}", u[None], y[None], interval)
    return Made(Trial(shape, (segment,), drift=True, noise="white", seed=seed), theta)


def cost(made: Made, result: RoadResult) -> float:
    """Sum of squares about the model at the answer, the nuisance at its best."""
    residual = Problem(made.trial, made.trial.segments).reduced(result.theta)[0]
    return float(residual @ residual)


def lost(made: Made, road: str) -> tuple[float, float]:
    """(cost without a start)/(cost from the truth) - 1, and seconds."""
    begin = time.perf_counter()
    try:
        if road == "time":
            found = fit_time(made.trial)
        else:
            from rigtally.estimation.frequency_domain import fit_frequency

            found = fit_frequency(made.trial)
    except FitError:
        return float("inf"), time.perf_counter() - begin
    spent = time.perf_counter() - begin
    return cost(made, found) / cost(made, fit_time(made.trial, made.truth)) - 1.0, spent


def main() -> int:
    """Run, print every exception, and the share that met the promise."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--road", choices=["time", "frequency"], default="time")
    parser.add_argument("--records", type=int, default=3000)
    parser.add_argument("--first", type=int, default=0)
    parser.add_argument("--longest", type=int, default=20_000)
    options = parser.parse_args()
    worse, seconds = [], 0.0
    for seed in range(options.first, options.first + options.records):
        made = random_record(seed, options.longest)
        excess, spent = lost(made, options.road)
        seconds += spent
        if excess > 1e-6:
            worse.append(seed)
            segment = made.trial.segments[0]
            sys.stdout.write(
                f"seed {seed}: excess {excess:.3g}, {segment.count} samples, truth {made.truth}\n"
            )
            sys.stdout.flush()
    share = 1.0 - len(worse) / options.records
    sys.stdout.write(
        f"{options.road}: {share:.4%} of {options.records} at or below the cost from the truth; "
        f"{1e3 * seconds / options.records:.0f} ms a fit\n"
    )
    return 0 if share >= 0.999 else 1


if __name__ == "__main__":
    raise SystemExit(main())
