"""Damaged logs in all written forms: none may be misread, raise anything but a refusal, or hang.

    python benchmarks/fuzz_reading.py [how many, 6000] [seed]

Prints how many were read, refused and wrong. Ends with 1 if one was wrong.
"""

from __future__ import annotations

import sys
import tempfile
import time
import warnings
from collections import Counter
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1] / "tests"))

import rigtally as rt
from log_forms import forms
from log_mutants import moved, mutant
from rigtally.records.record import Record


def main(count: int, seed: int) -> int:
    warnings.simplefilter("error")
    every = [form for form in forms() if not form.ambiguous]
    tally: Counter[str] = Counter()
    refusals: Counter[str] = Counter()
    wrong = []
    slowest = 0.0
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "log.csv"
        for k in range(count):
            rng = np.random.default_rng([seed, k])
            form = every[int(rng.integers(len(every)))]
            damaged = mutant(form, rng)
            path.write_bytes(damaged.content)
            begin = time.perf_counter()
            try:
                found = rt.read(path)
                fault = moved(damaged, found) if isinstance(found, Record) else "read as a response"
                tally["read" if fault is None else "wrong"] += 1
            except rt.RigtallyError as refusal:
                fault = None
                tally["refused"] += 1
                refusals[refusal.code] += 1
            except Exception as failure:
                fault = f"{type(failure).__name__}: {failure}"
                tally["traceback"] += 1
            slowest = max(slowest, time.perf_counter() - begin)
            if fault is not None:
                wrong.append(f"{k} {form.name}: {damaged.how}: {fault}")
    for line in wrong[:40]:
        print(line)
    print(dict(tally), f"read {tally['read'] / count:.1%}, slowest {slowest:.2f} s")
    print("refusals:", dict(refusals.most_common()))
    return 1 if wrong else 0


if __name__ == "__main__":
    numbers = [int(each) for each in sys.argv[1:3]]
    sys.exit(main(*(numbers + [6000, 1][len(numbers) :])))
