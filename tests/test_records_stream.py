"""Streams: the same samples as a whole reading, in bounded memory."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

import rigtally as rt
from rigtally.errors import LogError
from rigtally.records.record import Record
from rigtally.records.stream import open_stream

h5py = pytest.importorskip("h5py")


def write(path: Path, count: int = 10_000) -> None:
    rng = np.random.default_rng(2)
    with h5py.File(path, "w") as f:
        f["time"] = np.arange(count) * 0.5
        f["p"] = rng.integers(0, 30_000, count).astype("i2")
        f["q"] = rng.normal(size=count).astype("f4")
        f["time"].attrs["units"] = "ms"
        f["p"].attrs.update({"units": "kPa", "scale_factor": 0.01, "add_offset": -5.0, "_FillValue": 77})
        f["q"].attrs["units"] = "degC"


@pytest.mark.parametrize("size", [1, 999, 10_000, 1 << 20])
def test_blocks_are_the_record(size: int, tmp_path: Path) -> None:
    """Blocks of any size, put together, are the samples that a whole reading gives, bit by bit."""
    path = tmp_path / "log.h5"
    write(path, 500 if size == 1 else 10_000)
    whole = rt.read(path)
    assert isinstance(whole, Record)
    stream = open_stream(path)
    assert [c.name for c in stream.channels] == list(whole.names)
    assert (stream.count, stream.start, stream.interval) == (whole.count, 0.0, pytest.approx(5e-4))
    together = np.concatenate(list(stream.blocks(size)), axis=1)
    np.testing.assert_array_equal(together, np.array([c.samples for c in whole.channels]))
    assert stream.provenance.sha256 == whole.provenance.sha256
    assert [(c.unit, c.factor, c.unit_known) for c in stream.channels] == [
        (c.unit, c.factor, c.unit_known) for c in whole.channels
    ]


def test_matrices_stream_both_ways(tmp_path: Path) -> None:
    """Time along rows or columns; the channels asked for, in that order."""
    table = np.random.default_rng(1).normal(size=(3000, 2))
    for across in (False, True):
        path = tmp_path / f"{across}.h5"
        with h5py.File(path, "w") as f:
            f["log"] = table.T if across else table
            f["log"].attrs.update({"channels": ["a", "b"], "units": ["V", "A"], "fs": 1e3})
        stream = open_stream(path, channels=["b", "a"])
        np.testing.assert_array_equal(np.concatenate(list(stream.blocks(700)), axis=1), table[:, ::-1].T)
        assert stream.interval == 1e-3


def test_an_uneven_clock_is_not_streamed(tmp_path: Path) -> None:
    """One lost row in the middle is found though the file is never held."""
    path = tmp_path / "log.h5"
    with h5py.File(path, "w") as f:
        t = np.delete(np.arange(10_000) * 1e-3, 5000)
        f["time"], f["p"] = t, t
        f["time"].attrs["units"] = "s"
    with pytest.raises(LogError) as refusal:
        open_stream(path)
    assert refusal.value.code == "not-uniform"
    assert open_stream(path, rate="1 kHz").interval == pytest.approx(1e-3)
    with pytest.raises(LogError) as refusal:
        open_stream(path, rate="1 kHz", channels=["x"])
    assert refusal.value.code == "no-such-channel"


def test_a_stream_stays_small(tmp_path: Path) -> None:
    """A file of 160 MB (as numbers: 320 MB) is passed through in 250 MB above the libraries' own memory."""
    path = tmp_path / "log.h5"
    with h5py.File(path, "w") as f:
        for name in ("u", "y"):
            data = f.create_dataset(name, (20_000_000,), "f4", chunks=(1 << 16,), compression="gzip")
            data[:1000] = 1.5
        f.attrs["sample_rate"] = 1e4
    code = (
        "import resource, sys\nfrom rigtally.records.stream import open_stream\nimport h5py, numpy\n"
        "before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss\n"
        "total = sum(float(block[1].sum()) for block in open_stream(sys.argv[1]).blocks())\n"
        "print(total, (resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before) / 1024)"
    )
    environment = {**os.environ, "OPENBLAS_NUM_THREADS": "1"}
    done = subprocess.run(
        [sys.executable, "-c", code, str(path)], capture_output=True, text=True, env=environment, check=True
    )
    total, grown = map(float, done.stdout.split())
    assert total == 1500.0
    assert grown < 250.0
