"""Files that are no logs, or were made to harm: refused in seconds and in bounded memory."""

from __future__ import annotations

import gzip
import io
import json
import os
import subprocess
import sys
import time
import zipfile
from pathlib import Path

import numpy as np
import pytest

import rigtally as rt
from rigtally.errors import LogError, RigtallyError

LIMIT = 1_500_000_000
SECONDS = 45.0  # "within seconds" on any machine, loaded or not: a hang is what is looked for
# reads one file under a limit of memory and says the refusal's code
READ = """
import json, resource, sys
resource.setrlimit(resource.RLIMIT_AS, ({limit}, {limit}))
import rigtally as rt
try:
    rt.read(sys.argv[1], rate=1.0)
    print(json.dumps(["read", ""]))
except rt.RigtallyError as refusal:
    print(json.dumps([refusal.code, refusal.line()]))
"""


def bounded(path: Path) -> str:
    """The refusal's code, read by another process with 1.5 GB and some seconds."""
    environment = {**os.environ, "OPENBLAS_NUM_THREADS": "1"}
    begin = time.monotonic()
    done = subprocess.run(
        [sys.executable, "-c", READ.format(limit=LIMIT), str(path)],
        capture_output=True, text=True, timeout=60, env=environment,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    assert time.monotonic() - begin < SECONDS
    code, line = json.loads(done.stdout)
    assert code == "read" or line
    return str(code)


def test_a_packed_file_that_grows_to_gigabytes(tmp_path: Path) -> None:
    """Three gigabytes of zeros (and of digits) in three megabytes are refused before they are unpacked."""
    for name, piece in (("zeros", bytes(1 << 20)), ("digits", b"0.001,1.5\n" * 100_000)):
        path = tmp_path / f"{name}.csv.gz"
        packed = io.BytesIO()
        with gzip.GzipFile(fileobj=packed, mode="wb", compresslevel=9) as stream:
            for _ in range(200):
                stream.write(piece)
        # members may follow each other
        path.write_bytes(packed.getvalue() * 15)
        assert bounded(path) == "too-large"


def test_a_packed_log_is_read_and_a_torn_one_refused(tmp_path: Path) -> None:
    """A gzip cut short or damaged is refused, not read in part."""
    rows = "t [s],p [kPa]\n" + "".join(f"{k / 8:.3f},{np.sin(k):.4f}\n" for k in range(2000))
    whole = gzip.compress(rows.encode())
    path = tmp_path / "log.csv.gz"
    path.write_bytes(whole)
    found = rt.read(path)
    assert found.count == 2000
    assert "out of gzip" in found.provenance.how_read[0]
    damaged = bytearray(whole)
    damaged[len(whole) // 2] ^= 0xFF
    for content in (whole[: len(whole) // 2], whole[:-4], whole[:12], bytes(damaged)):
        path.write_bytes(content)
        with pytest.raises(LogError) as refusal:
            rt.read(path)
        assert refusal.value.code == "truncated"


@pytest.mark.parametrize("sign", ["x", "1", ",", "1,", '"', "\t", " ", "#", "9."])
def test_a_line_of_a_million_signs(sign: str, tmp_path: Path) -> None:
    """Endless lines are refused at once, whatever they hold."""
    path = tmp_path / "log.csv"
    path.write_text("t,p\n1,2\n" + sign * (1_000_000 // len(sign)) + "\n3,4\n")
    begin = time.monotonic()
    with pytest.raises(LogError) as refusal:
        rt.read(path)
    assert refusal.value.code == "line-too-long"
    assert time.monotonic() - begin < SECONDS


def test_noise_is_refused(tmp_path: Path) -> None:
    """Random bytes, random letters and the heads of other files."""
    rng = np.random.default_rng(3)
    every = {
        "noise": rng.integers(0, 256, 300_000, dtype=np.uint8).tobytes(),
        "no-zeros": rng.integers(1, 256, 300_000, dtype=np.uint8).tobytes(),
        "letters": bytes(rng.choice(list(b"abcdefgh \n"), 300_000).astype(np.uint8)),
        "zeros": bytes(100_000),
        "blank": b" \n" * 1000,
        "picture": b"\x89PNG\r\n\x1a\n" + bytes(100),
        "hdf5-head": b"\x89HDF\r\n\x1a\n" + bytes(1000),
        "odd-utf-16": b"\xff\xfe1",
        "one-byte": b"7",
        "one-row": b"1,2\n",
        "marks": b",,,;;;\n" * 5000,
    }
    packed = io.BytesIO()
    with zipfile.ZipFile(packed, "w") as archive:
        archive.writestr("log.csv", "t,p\n1,2\n")
    every["archive"] = packed.getvalue()
    for name, content in every.items():
        path = tmp_path / name
        path.write_bytes(content)
        begin = time.monotonic()
        with pytest.raises(RigtallyError) as refusal:
            rt.read(path, rate=1.0)
        assert refusal.value.what and refusal.value.do, name
        assert time.monotonic() - begin < SECONDS, name


def test_what_is_no_file_is_refused(tmp_path: Path) -> None:
    """A missing file, a folder, a device, an empty file, a name with a zero."""
    empty = tmp_path / "empty.csv"
    empty.touch()
    for path, code in (
        (tmp_path / "none.csv", "no-such-file"), (tmp_path, "unreadable"), ("/dev/zero", "unreadable"),
        (empty, "empty"), ("a\0b", "no-such-file"), (f"{empty}:/run", "empty"),
    ):  # fmt: skip
        with pytest.raises(LogError) as refusal:
            rt.read(path)
        assert refusal.value.code == code


def test_many_columns_and_deep_quotes(tmp_path: Path) -> None:
    """Thousands of columns are read; pages of quotes are refused in time."""
    wide = "t [s]," + ",".join(f"c{k} [V]" for k in range(4000)) + "\n"
    wide += "".join(f"{r / 4:.2f}," + ",".join(["1.5"] * 4000) + "\n" for r in range(20))
    path = tmp_path / "log.csv"
    path.write_text(wide)
    begin = time.monotonic()
    assert len(rt.read(path).channels) == 4000
    path.write_text('"""",""' * 20_000)
    with pytest.raises(LogError):
        rt.read(path)
    path.write_text("1,2\n" + '"""",""\n' * 50_000)
    with pytest.raises(LogError):
        rt.read(path)
    assert time.monotonic() - begin < SECONDS


def test_an_absurd_hdf5_stays_in_bounds(tmp_path: Path) -> None:
    """Ten gigabytes of packed zeros in a small HDF5 file are refused in 1.5 GB of memory."""
    h5py = pytest.importorskip("h5py")
    path = tmp_path / "log.h5"
    with h5py.File(path, "w") as f:
        f.create_dataset("p", (1_250_000_000,), "f8", chunks=(1_000_000,), compression="gzip")
    assert bounded(path) == "too-large"
