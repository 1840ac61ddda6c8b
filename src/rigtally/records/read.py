"""The door: any log, whatever it is, to a Record or a Response."""

from __future__ import annotations

import os
from collections.abc import Callable, Mapping, Sequence

from rigtally.errors import LogError, UsageError
from rigtally.records.columns import parse_rate, to_record
from rigtally.records.csv_layout import Wishes
from rigtally.records.csv_log import read_text
from rigtally.records.record import Record, Response
from rigtally.records.response_table import is_response, to_response
from rigtally.records.source import open_bytes

_HDF5 = b"\x89HDF\r\n\x1a\n"


def read(
    path: str | os.PathLike[str],
    *,
    time: str | int | None = None,
    rate: float | str | None = None,
    units: Mapping[str, str] | None = None,
    channels: Sequence[str] | None = None,
    separator: str | None = None,
    decimal: str | None = None,
    thousands: str | None = None,
    encoding: str | None = None,
    header: int | str | None = None,
    missing: Sequence[str] = (),
    progress: Callable[[int, int], None] | None = None,
) -> Record | Response:
    """Read a log; what kind of file it is stands in its first bytes, not in its name.

    Every guess can be overridden; how the file was read stands in `provenance.how_read`.

    Parameters
    ----------
    path : str or path
        A text log (CSV and its kin, packed with gzip or not), an HDF5 file, or `FILE.h5:/group`.
    time : str or int or None
        The time column by name, or by number from 1.
    rate : float, str or None
        Samples per second, as 1000.0 or "1 kHz".
    units : mapping or None
        Unit by channel; overrides what the log says.
    channels : sequence of str or None
        Read only these channels.
    separator, decimal, thousands : str or None
        Of a text log: "comma", "semicolon", "tab", "space", "bar" or the sign itself; "." or ","; the mark,
        or "none".
    encoding : str or None
        Of a text log.
    header : int, "none" or None
        Line of the names, counted from 1.
    missing : sequence of str
        Further spellings of "no value".
    progress : callable or None
        Called with (bytes done, bytes in all).

    Returns
    -------
    Record, or Response where the columns are a frequency and a gain.

    Raises
    ------
    LogError
        The log cannot be used; codes "no-such-file", "unreadable", "empty", "binary", "encoding",
        "truncated", "too-large", "line-too-long", "no-numbers", "ambiguous", "header-mismatch", "ragged",
        "quotes", "two-tables", "unreadable-cell", "bad-stamp", "time-unit", "no-such-channel",
        "not-numeric", "which-group", "no-unit", and those of the clock.
    UsageError
        An option is wrong: codes "bad-option", "bad-rate", "unknown-unit".
    """
    file = os.fspath(path)
    hertz = parse_rate(rate)
    stated = dict(units or {})
    if isinstance(time, str) and time.isdigit():
        time = int(time)
    if not isinstance(file, str):
        raise UsageError(f"the path {path!r} is no text", do="give the file's name", code="bad-option")
    name, group = _group(file)
    if "\0" in name:
        raise LogError(
            "the name holds a zero", where=repr(file), do="give the file's name", code="no-such-file"
        )
    if bytes(open_bytes(name)[:8]) == _HDF5:
        from rigtally.records.hdf5_log import read_hdf5

        return read_hdf5(file, name, group, time=time, rate=hertz, units=stated, channels=channels)
    if group:
        raise LogError("this is no HDF5 file", where=name, do="leave the group out", code="unreadable")
    wishes = Wishes.of(separator, decimal, thousands, header)
    log = read_text(
        name,
        encoding=encoding,
        wishes=wishes,
        # a named time column may be any
        channels=channels if time is None else None,
        missing=missing,
        progress=progress,
    )
    if time is None and rate is None and is_response(log.columns):
        return to_response(log.columns, stated, log.provenance)
    return to_record(
        log.columns,
        time=time,
        rate=hertz,
        stated_rate=log.rate,
        units=stated,
        channels=channels,
        provenance=log.provenance,
    )


def _group(file: str) -> tuple[str, str]:
    """FILE and the group in FILE.h5:/group."""
    if not os.path.exists(file):
        name, sign, group = file.partition(":/")
        if sign and os.path.isfile(name):
            return name, "/" + group
    return file, ""
