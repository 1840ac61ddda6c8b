"""Make the sample logs: the invented rigs of sample_rigs.py through a field logger with its habits.

Run: .venv/bin/python scripts/make_sample_data.py [FOLDER]      (default: sample_data)
"""

from __future__ import annotations

import sys
from pathlib import Path

import h5py
import numpy as np
from numpy.typing import NDArray

from sample_rigs import (
    IMPULSE_LINE,
    RATE_CAPSULE,
    WINCH_MOTOR,
    Test,
    impulse_line,
    rate_capsule,
    winch_motor,
)

Array = NDArray[np.float64]
# channel: written unit, SI per written unit, noise (written units), resolution (written units), offset
CHANNELS = {
    "p_line": ("kPa", 1e3, 0.004, 0.002, 0.0),
    "p_gauge": ("kPa", 1e3, 0.50, 0.05, 1.30),
    "p_out": ("kPa", 1e3, 0.0006, 0.0002, 1000.0),
    "x_tip": ("mm", 1e-3, 0.003, 0.0005, 0.412),
    "u_supply": ("V", 1.0, 0.0008, 0.0005, 0.0),
    "m_load": ("N*m", 1.0, 0.00001, 0.000005, 0.0),
    "i_motor": ("A", 1.0, 0.05, 0.01, 0.08),
    "w_drum": ("rad/s", 1.0, 0.6, 0.1, -0.9),
}


def logged(test: Test, seed: int) -> dict[str, Array]:
    """Each channel in its written unit: offset, noise, and the converter's steps."""
    rng = np.random.default_rng(seed)
    out = {}
    for name, values in test.channels.items():
        _, scale, noise, step, offset = CHANNELS[name]
        read = values / scale + offset + rng.normal(0.0, noise, values.size)
        out[name] = np.round(read / step) * step
    return out


def write_csv(path: Path, test: Test, seed: int, heading: list[str]) -> None:
    """Commas, a preamble, units in brackets."""
    rows = logged(test, seed)
    names = ["t [s]", *(f"{name} [{CHANNELS[name][0]}]" for name in rows)]
    lines = [*heading, "", ",".join(names)]
    # a stamp must not be rounded to less than the interval holds, or an even clock is written as an uneven one
    interval = float(test.time[1] - test.time[0])
    digits = 4 if abs(interval * 1e4 - round(interval * 1e4)) < 1e-6 else 5
    places = [max(0, int(np.ceil(-np.log10(CHANNELS[name][3])))) for name in rows]
    for k, t in enumerate(test.time):
        cells = [
            f"{t:.{digits}f}",
            *(f"{column[k]:.{p}f}" for column, p in zip(rows.values(), places, strict=True)),
        ]
        lines.append(",".join(cells))
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")


def write_semicolons(path: Path, test: Test, seed: int, heading: list[str]) -> None:
    """Semicolons, decimal commas, a row of units."""
    rows = logged(test, seed)
    lines = [*heading, ";".join(["t", *rows]), ";".join(["s", *(CHANNELS[name][0] for name in rows)])]
    places = [max(0, int(np.ceil(-np.log10(CHANNELS[name][3])))) for name in rows]
    for k, t in enumerate(test.time):
        cells = [f"{t:.5f}", *(f"{column[k]:.{p}f}" for column, p in zip(rows.values(), places, strict=True))]
        lines.append(";".join(cells).replace(".", ","))
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")


def write_hdf5(path: Path, test: Test, seed: int) -> None:
    """A data set for each channel, units and sampling rate as attributes."""
    rows = logged(test, seed)
    with h5py.File(path, "w", track_order=True) as file:
        file.attrs["note"] = "invented data"
        file.attrs["sample_rate"] = 1.0 / (test.time[1] - test.time[0])
        for name, column in rows.items():
            data = file.create_dataset(name, data=column, compression="gzip", track_times=False)
            data.attrs["units"] = CHANNELS[name][0]


def preamble(rig: str, test: str, number: int) -> list[str]:
    """What a field logger writes above its columns."""
    return [
        "# field logger, unit 7 (invented data)",
        f"# rig: {rig}",
        f"# test: {test}",
        f"# record {number}, 16 bit, anti-alias filter off",
    ]


def make(folder: Path) -> list[Path]:
    """Write every sample log."""
    line = folder / "impulse_line"
    capsule = folder / "rate_capsule"
    winch = folder / "winch_motor"
    for each in (line, capsule, winch):
        each.mkdir(parents=True, exist_ok=True)
    out = []
    for k, height in enumerate((78e3, 80e3, 83e3), start=1):
        path = line / f"line_step_{k}.csv"
        test = impulse_line(IMPULSE_LINE, height=height, at=0.48 + 0.013 * k)
        write_csv(path, test, 100 + k, preamble("pump test bench, discharge gauge", f"step {k}", 40 + k))
        out.append(path)
    path = line / "after_refill.csv"
    write_csv(
        path,
        impulse_line(IMPULSE_LINE, air=1.75e-6, height=42e3),
        104,
        preamble("pump test bench, discharge gauge", "after refill", 52),
    )
    out.append(path)
    path = capsule / "ramps.h5"
    write_hdf5(path, rate_capsule(RATE_CAPSULE), 201)
    out.append(path)
    path = winch / "voltage_and_load.csv"
    write_semicolons(path, winch_motor(WINCH_MOTOR), 301, preamble("winch, 24 V", "voltage and load", 7))
    out.append(path)
    return out


if __name__ == "__main__":
    target = Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parents[1] / "sample_data"
    for written in make(target):
        print(written)
