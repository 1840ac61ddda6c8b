"""How long reading takes against the bare reader told everything: ratios, not seconds, are what counts.

    python benchmarks/reading.py [rows, 1000000]

Each is the best of five runs, taken in turn. The machine is printed beside them.
"""

from __future__ import annotations

import platform
import resource
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pandas as pd

import rigtally as rt


def best(*jobs: Callable[[], Any], runs: int = 5) -> list[float]:
    """Best time of each job in seconds; the jobs take turns."""
    times = [float("inf")] * len(jobs)
    for _ in range(runs):
        for k, job in enumerate(jobs):
            begin = time.perf_counter()
            job()
            times[k] = min(times[k], time.perf_counter() - begin)
    return times


def main(count: int) -> None:
    rng = np.random.default_rng(0)
    table = np.column_stack([1e-3 * np.arange(count), rng.normal(50, 20, (count, 2))])
    print(f"{platform.processor() or platform.machine()}, Python {platform.python_version()}, {count} rows")
    with tempfile.TemporaryDirectory() as folder:
        for name, separator, decimal in (("comma", ",", "."), ("semicolon, decimal comma", ";", ",")):
            path = Path(folder) / "log.csv"
            with path.open("w") as stream:
                stream.write(separator.join(["t [s]", "p1 [kPa]", "p2 [kPa]"]) + "\n")
                for begin in range(0, count, 100_000):
                    lines = "\n".join(
                        f"{t:.3f};{p:.5f};{q:.5f}" for t, p, q in table[begin : begin + 100_000]
                    )
                    lines = lines.replace(".", "D").replace(";", separator).replace("D", decimal)
                    stream.write(lines + "\n")
            bare, ours = best(
                lambda path=path, s=separator, d=decimal: pd.read_csv(path, sep=s, decimal=d, dtype=float),
                lambda path=path: rt.read(path),
            )
            print(f"CSV, {name}: bare {bare:.3f} s, read {ours:.3f} s, ratio {ours / bare:.2f}")
        path = Path(folder) / "log.h5"
        with h5py.File(path, "w") as file:
            for k, name in enumerate(("time", "p1", "p2")):
                file[name] = table[:, k]
                file[name].attrs["units"] = "s" if k == 0 else "kPa"

        def bare_hdf5() -> None:
            with h5py.File(path) as file:
                [file[name][()] for name in ("time", "p1", "p2")]

        bare, ours = best(bare_hdf5, lambda: rt.read(path))
        print(f"HDF5: bare {bare:.3f} s, read {ours:.3f} s, ratio {ours / bare:.2f}")
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    print(f"peak memory {peak / 1024:.0f} MB")


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 1_000_000)
