"""Cold start: `rigtally fit` of a 10 000-row log against importing lmfit, pandas and pint alone.

Run: .venv/bin/python benchmarks/import_time.py
Prints medians of both and their difference, from runs in turn; the aim: at most 0.6 s between them.
"""

from __future__ import annotations

import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

RUNS = 7


def log(path: Path) -> None:
    """A second-order step response of 10 000 rows (invented)."""
    rng = np.random.default_rng(1)
    t = np.arange(10_000) * 1e-3
    u = np.where(t < 1.0, 0.0, 50.0)
    w, z = 12.0, 0.4
    d = w * np.sqrt(1 - z * z)
    late = np.clip(t - 1.0, 0, None)
    y = 50.0 * (1 - np.exp(-z * w * late) * (np.cos(d * late) + z * w / d * np.sin(d * late)))
    y = np.where(t < 1.0, 0.0, y) + rng.normal(0, 0.3, t.size)
    rows = "\n".join(f"{a:.3f},{b:.4f},{c:.4f}" for a, b, c in zip(t, u, y, strict=True))
    path.write_text(f"t [s],p_in [kPa],p_out [kPa]\n{rows}\n")


def seconds(command: list[str]) -> float:
    begin = time.perf_counter()
    subprocess.run(command, check=True, stdout=subprocess.DEVNULL)
    return time.perf_counter() - begin


def main() -> None:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "log.csv"
        log(path)
        ours = [
            sys.executable,
            "-m",
            "rigtally.cli",
            "fit",
            str(path),
            "--input",
            "p_in",
            "--output",
            "p_out",
        ]
        bare = [sys.executable, "-c", "import lmfit, pandas, pint"]
        help_ = [sys.executable, "-m", "rigtally.cli", "--help"]
        for command in (ours, bare, help_):
            seconds(command)
        table = [(seconds(ours), seconds(bare), seconds(help_)) for _ in range(RUNS)]
    fit, imports, helped = (statistics.median(column) for column in zip(*table, strict=True))
    extra = statistics.median(a - b for a, b, _ in table)
    print(
        f"cold fit {fit:.2f} s, imports alone {imports:.2f} s, difference {extra:.2f} s (aim: at most 0.60 s)"
    )
    print(f"rigtally --help {helped:.2f} s")


if __name__ == "__main__":
    main()
