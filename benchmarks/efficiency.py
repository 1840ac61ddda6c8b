"""Efficiency and honesty of a road by Monte Carlo: RMSE over the bound, coverage of the 95 % interval, cell by cell.

    python benchmarks/efficiency.py --road frequency --records 2000 --rho 0 --samples 2000

Records: second order, held input, offset free, initial state free; noise white (rho 0) or AR(1). The bound is the
brute-force one of tests/bound.py (QR, same free offset and initial state). Seeds are fixed by --seed.
"""

from __future__ import annotations

import argparse
import sys
import time
from pathlib import Path

import numpy as np
from scipy import signal, stats

sys.path.insert(0, str(Path(__file__).parents[1] / "tests"))
from bound import second_order, second_order_bound
from rigtally.estimation.frequency_domain import fit_frequency
from rigtally.estimation.time_domain import fit_time
from rigtally.estimation.trial import Segment, Trial
from rigtally.forms.named import form

ROADS = {"frequency": fit_frequency, "time": fit_time}
W, INTERVAL = 30.0, 2e-3
SECOND = form("second-order")


def made(kind: str, count: int, rng: np.random.Generator) -> np.ndarray:
    """A step after a fifth of the record, or noise held for four samples."""
    if kind == "step":
        return (np.arange(count) >= count // 5).astype(float)
    return np.repeat(rng.normal(size=-(-count // 4)), 4)[:count]


def noise(count: int, rho: float, rng: np.random.Generator) -> np.ndarray:
    """Stationary noise of unit standard deviation."""
    e = rng.normal(size=count)
    if rho:
        e[1:] *= np.sqrt(1 - rho**2)
        e = signal.lfilter([1.0], [1.0, -rho], e)
    return e


def cell(
    road: str, damping: float, decibels: int, kind: str, *, records: int, samples: int, rho: float, seed: int
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Errors over the bound, errors over U, and u over the bound, (records, 3) each (K, ωn, ζ)."""
    rng = np.random.default_rng([seed, int(100 * damping), decibels, len(kind)])
    theta = np.array([2.0, W, damping])
    u = made(kind, samples, rng)
    clean = second_order(theta, u, INTERVAL, np.zeros(2))
    sigma = float(np.std(clean)) * 10 ** (-decibels / 20)
    limit = second_order_bound(theta, u, INTERVAL, sigma, rho=rho)
    off, pull, width = [], [], []
    for _ in range(records):
        y = clean + 0.4 + sigma * noise(samples, rho, rng)
        found = ROADS[road](Trial(SECOND, (Segment("made", u[None], y[None], INTERVAL),)))
        size = np.sqrt(np.diag(found.covariance))
        error = found.theta - theta
        off.append(error / limit)
        pull.append(error / (size * stats.t.ppf(0.975, found.dof)))
        width.append(size / limit)
    return np.array(off), np.array(pull), np.array(width)


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--road", choices=[*ROADS], default="frequency")
    parser.add_argument("--records", type=int, default=200)
    parser.add_argument("--samples", type=int, default=2000)
    parser.add_argument("--rho", type=float, default=0.0)
    parser.add_argument("--seed", type=int, default=1)
    chosen = parser.parse_args()
    print(f"{chosen.road} road, {chosen.records} records a cell, {chosen.samples} samples, rho {chosen.rho}")
    print("damping   dB  input   RMSE/bound K, wn, zeta     coverage K, wn, zeta     mean width/bound    ms")
    pooled_off, pooled_pull = [], []
    for damping in (0.05, 0.3, 0.7, 1.2):
        for decibels in (20, 40):
            for kind in ("step", "noise"):
                begin = time.process_time()
                off, pull, width = cell(
                    chosen.road, damping, decibels, kind,
                    records=chosen.records, samples=chosen.samples, rho=chosen.rho, seed=chosen.seed,
                )  # fmt: skip
                spent = 1e3 * (time.process_time() - begin) / chosen.records
                rmse = np.sqrt(np.mean(off**2, axis=0))
                covered = np.mean(np.abs(pull) <= 1, axis=0)
                print(
                    f"{damping:6.2f} {decibels:5d}  {kind:6s}  {rmse.round(3)}   {covered.round(3)}   "
                    f"{np.mean(width, axis=0).round(3)}  {spent:6.1f}",
                    flush=True,
                )
                pooled_off.append(off)
                pooled_pull.append(pull)
    off, pull = np.concatenate(pooled_off), np.concatenate(pooled_pull)
    # the median of the squared error resists a few failed cells; 0.4549 is the median of chi-squared with one
    print(
        f"pooled RMSE/bound {np.sqrt(np.mean(off**2)):.4f}, by medians {np.sqrt(np.median(off**2) / 0.4549):.4f}"
    )
    print(
        f"pooled coverage {np.mean(np.abs(pull) <= 1):.4f}; tails {np.mean(pull > 1):.4f}, {np.mean(pull < -1):.4f}"
    )


if __name__ == "__main__":
    main()
