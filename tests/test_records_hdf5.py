"""HDF5 logs: one obvious record needs no options, several are listed, nothing leaves the file."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import rigtally as rt
from rigtally.errors import LogError

h5py = pytest.importorskip("h5py")

RNG = np.random.default_rng(5)
T = np.arange(400) * 2e-3
P = 101.0 + RNG.normal(size=400)
Q = 3.0 + RNG.normal(size=400)


def _flat(f: h5py.File) -> None:
    for name, data, unit in (("time", T, "s"), ("p", P, "kPa"), ("q", Q, "V")):
        f[name] = data
        f[name].attrs["units"] = unit


def _packed(f: h5py.File) -> None:
    for name, data, unit in (("time", 1e3 * T, "ms"), ("p", P, b"kPa"), ("q", Q, "V")):
        f.create_dataset(name, data=data, chunks=(64,), compression="gzip", shuffle=True)
        f[name].attrs["unit"] = unit


def _group(f: h5py.File) -> None:
    g = f.create_group("run")
    g["p"], g["q"] = P, Q
    g["p"].attrs["Units"], g["q"].attrs["Units"] = "kPa", "V"
    g.attrs["sample_rate"] = 500.0


def _nested(f: h5py.File) -> None:
    for name, data, unit in (("p", P, "kPa"), ("q", Q, "V")):
        f[f"bench/{name}/data"] = data
        f[f"bench/{name}/data"].attrs["units"] = unit
    f.attrs["sampling_interval"] = 2e-3


def _compound(f: h5py.File) -> None:
    table = np.zeros(400, dtype=[("t [s]", "f8"), ("p [kPa]", "f8"), ("q [V]", "f8"), ("state", "S2")])
    table["t [s]"], table["p [kPa]"], table["q [V]"], table["state"] = T, P, Q, b"OK"
    f["log"] = table


def _matrix(f: h5py.File) -> None:
    f["log"] = np.column_stack([T, P, Q])
    f["log"].attrs["channels"] = ["time", "p", "q"]
    f["log"].attrs["units"] = ["s", "kPa", "V"]


def _matrix_across(f: h5py.File) -> None:
    f["log"] = np.vstack([P, Q])
    f["log"].attrs["channel_names"] = "p,q"
    f["log"].attrs["units"] = "kPa,V"
    f["log"].attrs["sample_rate"] = "0.5 kHz"


def _scaled(f: h5py.File) -> None:
    f["time"] = T
    f["time"].attrs["units"] = "s"
    for name, data, unit in (("p", P, "kPa"), ("q", Q, "V")):
        f[name] = np.round((data - 50.0) / 1e-5).astype("i4")
        f[name].attrs.update({"scale_factor": 1e-5, "add_offset": 50.0, "units": unit})


WRITERS = (_flat, _packed, _group, _nested, _compound, _matrix, _matrix_across, _scaled)


@pytest.mark.parametrize("write", WRITERS, ids=lambda w: w.__name__.strip("_"))
def test_one_obvious_record_needs_no_options(write, tmp_path: Path) -> None:
    """Flat, packed, grouped, nested, compound, matrix and scaled integers give one record."""
    path = tmp_path / "log.h5"
    with h5py.File(path, "w") as f:
        write(f)
    found = rt.read(path)
    assert found.names == ("p", "q")
    assert [c.unit for c in found.channels] == ["Pa", "V"]
    assert found.interval == pytest.approx(2e-3, rel=1e-12)
    close = 1e-5 if write is _scaled else 1e-13
    np.testing.assert_allclose(found.channels[0].in_written_unit, P, atol=close)
    np.testing.assert_allclose(found.channels[1].samples, Q, atol=close)
    assert len(found.provenance.sha256) == 64
    assert len(found.provenance.how_read) == 2


def test_several_records_are_listed_and_one_is_named(tmp_path: Path) -> None:
    """Two runs in a file are refused with what is there; FILE.h5:/run2 reads the second."""
    path = tmp_path / "log.h5"
    with h5py.File(path, "w") as f:
        for run, factor in (("run1", 1.0), ("run2", 2.0)):
            f[f"{run}/time"], f[f"{run}/p"] = T, factor * P
            f[f"{run}/time"].attrs["units"] = "s"
    with pytest.raises(LogError) as refusal:
        rt.read(path)
    assert refusal.value.code == "which-group"
    assert "/run1/p" in refusal.value.do and "/run2/p" in refusal.value.do
    np.testing.assert_array_equal(rt.read(f"{path}:/run2").channel("p").samples, 2.0 * P)
    with pytest.raises(LogError, match="there is no group") as refusal:
        rt.read(f"{path}:/run3")
    assert refusal.value.code == "no-such-group"


def test_fill_values_are_missing(tmp_path: Path) -> None:
    """What the file's fill value marks is NaN, and named."""
    path = tmp_path / "log.h5"
    with h5py.File(path, "w") as f:
        f["p"] = np.where(np.arange(400) == 7, -9999.0, P)
        f["p"].attrs["_FillValue"] = -9999.0
        f.attrs["fs"] = 500
    channel = rt.read(path).channel("p")
    assert np.flatnonzero(np.isnan(channel.samples)).tolist() == [7]
    assert [fault.kind for fault in channel.faults] == ["missing"]


def test_time_in_whole_numbers_without_unit_is_refused(tmp_path: Path) -> None:
    """Counts, seconds or milliseconds are never guessed; a stated unit settles it."""
    path = tmp_path / "log.h5"
    with h5py.File(path, "w") as f:
        f["time"], f["p"] = np.arange(400), P
    with pytest.raises(LogError) as refusal:
        rt.read(path)
    assert refusal.value.code == "time-unit"
    assert rt.read(path, units={"time": "ms"}).interval == pytest.approx(1e-3)


def test_nothing_outside_the_file_is_read(tmp_path: Path) -> None:
    """External links are not followed; external and virtual datasets are refused."""
    other = tmp_path / "other.h5"
    with h5py.File(other, "w") as f:
        f["p"] = P
    raw = tmp_path / "raw.bin"
    raw.write_bytes(P.tobytes())
    path = tmp_path / "log.h5"
    with h5py.File(path, "w") as f:
        f["link"] = h5py.ExternalLink(str(other), "/p")
    with pytest.raises(LogError) as refusal:
        rt.read(path, rate=500)
    assert refusal.value.code == "no-numbers"
    with pytest.raises(LogError):
        rt.read(f"{path}:/link", rate=500)
    with h5py.File(path, "w") as f:
        f.create_dataset("p", (400,), "f8", external=[(str(raw), 0, 3200)])
    with pytest.raises(LogError) as refusal:
        rt.read(path, rate=500)
    assert refusal.value.code == "outside-file"
    with h5py.File(path, "w") as f:
        layout = h5py.VirtualLayout((400,), "f8")
        layout[:] = h5py.VirtualSource(str(other), "p", shape=(400,))
        f.create_virtual_dataset("p", layout)
    with pytest.raises(LogError) as refusal:
        rt.read(path, rate=500)
    assert refusal.value.code == "outside-file"


@pytest.mark.parametrize("shape", [(10**12,), (2, 10**11), (10**6, 10**6)], ids=str)
def test_absurd_shapes_are_refused(shape: tuple[int, ...], tmp_path: Path) -> None:
    """A shape beyond memory is refused before anything is read."""
    path = tmp_path / "log.h5"
    with h5py.File(path, "w") as f:
        f.create_dataset("p", shape, "f4", chunks=tuple(min(side, 1000) for side in shape))
    with pytest.raises(LogError) as refusal:
        rt.read(path, rate=500)
    assert refusal.value.code == "too-large"


def test_a_loop_of_groups_ends(tmp_path: Path) -> None:
    """A group that holds itself is walked once."""
    path = tmp_path / "log.h5"
    with h5py.File(path, "w") as f:
        f["a/p"] = P
        f["a/again"] = f["a"]
        f["a"].attrs["fs"] = 500
    assert rt.read(path).names == ("p",)


def test_damaged_files_are_refused(tmp_path: Path) -> None:
    """Every file cut short or overwritten is read as written or refused, never a traceback."""
    path = tmp_path / "log.h5"
    with h5py.File(path, "w") as f:
        _packed(f)
    whole = path.read_bytes()
    rng = np.random.default_rng(1)
    outcomes = set()
    for k in range(60):
        content = bytearray(whole)
        if k % 2:
            del content[int(rng.integers(8, len(content))) :]
        else:
            for at in rng.integers(0, len(content), 40):
                content[at] = int(rng.integers(256))
        path.write_bytes(bytes(content))
        try:
            rt.read(path)
            outcomes.add("read")
        except rt.RigtallyError as refusal:
            outcomes.add(refusal.code)
    assert "unreadable" in outcomes
