"""Logs of the sample rigs with one element value at a time off by 6 u, to see that the tally names it.

Run: .venv/bin/python scripts/shift_elements.py FOLDER [STEPS]      (default: 6 u; negative steps are allowed)

The rig is still integrated by sample_rigs.py; of rigtally only the rig file's reader is used, for the stated values and
their u. The other values are those of the sample logs, which lie within their tolerances.
"""

from __future__ import annotations

import sys
from collections.abc import Callable
from pathlib import Path

from make_sample_data import preamble, write_semicolons
from rigtally import load_rig
from sample_rigs import IMPULSE_LINE, RATE_CAPSULE, WINCH_MOTOR, Test, impulse_line, rate_capsule, winch_motor

SAMPLES = Path(__file__).parents[1] / "sample_data"
STEPS = 6.0
RIGS: dict[str, tuple[dict[str, float], Callable[[dict[str, float]], Test]]] = {
    "impulse_line": (IMPULSE_LINE, impulse_line),
    "rate_capsule": (RATE_CAPSULE, rate_capsule),
    "winch_motor": (WINCH_MOTOR, winch_motor),
}
# every value of the sample rigs: (folder of the rig, name of the value)
CASES = tuple((folder, name) for folder, (values, _) in RIGS.items() for name in values)


def shifted(folder: str, name: str, steps: float = STEPS) -> Test:
    """What the rig shows when one value is off its stated value by so many of its own u."""
    values, simulate = RIGS[folder]
    stated = load_rig(SAMPLES / folder / "rig.toml").values[name]
    return simulate({**values, name: stated.value + steps * stated.u})


def make(target: Path, steps: float = STEPS) -> list[Path]:
    """Write one log for every value of every sample rig."""
    out = []
    for number, (folder, name) in enumerate(CASES):
        path = target / folder / f"{name.replace(' ', '_').replace('.', '-')}.csv"
        path.parent.mkdir(parents=True, exist_ok=True)
        test = shifted(folder, name, steps)
        write_semicolons(path, test, 500 + number, preamble(folder, f"{name} off by {steps:g} u", number))
        out.append(path)
    return out


__all__ = ["CASES", "RIGS", "SAMPLES", "STEPS", "make", "shifted"]


if __name__ == "__main__":
    if len(sys.argv) < 2:
        sys.exit(__doc__)
    for written in make(Path(sys.argv[1]), float(sys.argv[2]) if len(sys.argv) > 2 else STEPS):
        print(written)
