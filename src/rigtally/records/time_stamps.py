"""Stamps of date and time of day, as texts, to seconds from the first one."""

from __future__ import annotations

import re
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import LogError
from rigtally.records.csv_cells import MISSING

Array = NDArray[np.float64]

_ISO = re.compile(r"\d{4}-\d{2}-\d{2}(?:[T ]\d{2}:\d{2}(?::\d{2}(?:[.,]\d+)?)?(?:Z|[+-]\d{2}:?\d{2})?)?")
_PARTS = (
    r"^(?:(?:(?P<y>\d{4})[-/.](?P<m>\d{1,2})[-/.](?P<d>\d{1,2}))|"
    r"(?:(?P<a>\d{1,2})[-/.](?P<b>\d{1,2})[-/.](?P<c>\d{4}|\d{2})))?[T,\s]*"
    r"(?:(?P<h>\d{1,2}):(?P<n>\d{2})(?::(?P<s>\d{2}(?:[.,]\d+)?))?\s?(?P<half>[AaPp]\.?[Mm]\.?)?)?\s?"
    r"(?P<zone>Z|UTC|[+-]\d{2}:?\d{2}|[+-]\d{2})?$"
)
_MINUTES = r"\d{1,4}:\d{2}[.,]\d+"
_MONTHS = ("jan", "feb", "mar", "apr", "may", "jun", "jul", "aug", "sep", "oct", "nov", "dec")
_NAMED = re.compile(rf"^(\d{{1,2}})[-/. ]({'|'.join(_MONTHS)})[a-z]*[-/. ](\d{{4}})", re.IGNORECASE)
DAY = 86400.0


def seconds(texts: Any, where: str, first_line: int = 1) -> tuple[Array, str]:
    """Seconds from the first stamp, and that stamp as it is written.

    Stamps with a zone are brought to one zone. Times of day without a date pass midnight upwards.
    A date whose day and month cannot be told apart is refused only where the difference matters.

    Parameters
    ----------
    texts : (n,) array or Series of str
        One stamp each (date, time of day, or both); NaN or a spelling of "missing" where there is none.

    Raises
    ------
    LogError
        codes "bad-stamp", "ambiguous".
    """
    import pandas as pd

    given = pd.Series(np.asarray(texts, dtype=object))
    known = given.notna() & ~given.astype(str).str.strip().str.lower().isin(MISSING)
    kept = given[known].astype(str).str.strip()
    out = np.full(given.size, np.nan)
    if kept.empty:
        return out, ""
    rows = np.flatnonzero(known.to_numpy())
    start = str(kept.iloc[0])
    if _NAMED.match(start):
        kept = kept.str.replace(_NAMED, _numbered, regex=True)
    values = _iso(kept)
    if values is None and kept.str.fullmatch(_MINUTES).all():
        parts = kept.str.replace(",", ".", regex=False).str.split(":", expand=True)
        values = 60.0 * _numbers(parts[0]) + _numbers(parts[1])
    if values is None:
        values = _parts(kept, rows, where, first_line)
    out[rows] = values - values[0]
    return out, start


def _numbered(date: re.Match[str]) -> str:
    """Year-month-day of a date with the month's name."""
    month = _MONTHS.index(date.group(2).lower()) + 1
    return f"{date.group(3)}-{month:02d}-{int(date.group(1)):02d}"


def _iso(kept: Any) -> Array | None:
    """The common form at once; None where a stamp has another form."""
    import pandas as pd

    if not _ISO.fullmatch(kept.iloc[0]) or not _ISO.fullmatch(kept.iloc[-1]):
        return None
    plain = kept.str.replace(",", ".", regex=False) if kept.str.contains(",", regex=False).any() else kept
    try:
        moments = pd.to_datetime(plain, format="ISO8601", utc=True)
    except (ValueError, TypeError, OverflowError):
        return None
    whole = moments.to_numpy(dtype="datetime64[ns]").astype(np.int64)
    return np.asarray((whole - whole[0]) / 1e9)


def _parts(kept: Any, rows: NDArray[np.intp], where: str, first_line: int) -> Array:
    parts = kept.str.extract(_PARTS)
    has_date = parts["y"].notna() | parts["a"].notna()
    has_clock = parts["h"].notna()
    dated = bool(has_date.mean() > 0.5)
    wrong = ~(has_date if dated else has_clock)
    hour = _numbers(parts["h"])
    half = parts["half"].str.lower().str[0]
    wrong |= (hour > (12 if half.notna().any() else 24)) | (_numbers(parts["n"]) > 59)
    second = _numbers(parts["s"].str.replace(",", ".", regex=False))
    wrong |= second >= 61
    _refuse(wrong, kept, rows, where, first_line)
    hour = np.where(half == "p", hour % 12 + 12, np.where(half == "a", hour % 12, hour))
    clock = hour * 3600.0 + _numbers(parts["n"]) * 60.0 + second - _zone(parts["zone"])
    if not dated:
        if parts["s"].isna().all() and parts["half"].isna().all():
            raise LogError(
                f"the time {kept.iloc[-1]!r} can be read as hours and minutes or as minutes and seconds",
                where=where,
                do="write the seconds, or state --rate",
                code="ambiguous",
            )
        return _past_midnight(clock)
    days = _days(parts, kept, rows, where, first_line)
    # whole days first: a stamp's digits stand in the seconds of the day
    return np.asarray((days - days[0]) * DAY + clock)


def _numbers(column: Any) -> Array:
    return np.asarray(column.fillna("0").astype(float).to_numpy())


def _zone(column: Any) -> Array:
    """Seconds east of Greenwich."""
    text = column.fillna("").str.replace(":", "", regex=False).replace({"Z": "", "UTC": ""})
    sign = np.where(text.str.startswith("-"), -1.0, 1.0)
    hours = _numbers(text.str[1:3].replace("", None))
    minutes = _numbers(text.str[3:5].replace("", None))
    return np.asarray(sign * (hours * 3600.0 + minutes * 60.0))


def _past_midnight(clock: Array) -> Array:
    """One day more where the next row follows shortly after midnight; other falls are left to be refused."""
    steps = np.diff(clock)
    usual = float(np.median(steps)) if steps.size else 0.0
    falls = (steps < -0.5 * DAY) & (steps + DAY <= max(100.0 * usual, 60.0))
    return clock + DAY * np.concatenate([[0.0], np.cumsum(falls)])


def _days(parts: Any, kept: Any, rows: NDArray[np.intp], where: str, first_line: int) -> Array:
    """Day numbers; day and month told apart by what the dates allow."""
    if parts["y"].notna().all():
        return _calendar(parts["y"], parts["m"], parts["d"], kept, rows, where, first_line)
    if parts["y"].notna().any():
        raise LogError(
            "the dates are written in two ways", where=where, do="state --rate instead", code="bad-stamp"
        )
    year = parts["c"].where(parts["c"].str.len() == 4, "20" + parts["c"])
    first, second = _numbers(parts["a"]), _numbers(parts["b"])
    day_first = bool((second <= 12).all() and (first <= 31).all())
    month_first = bool((first <= 12).all() and (second <= 31).all())
    if not day_first and not month_first:
        _refuse((first > 12) & (second > 12) | (first > 31) | (second > 31), kept, rows, where, first_line)
        raise LogError(
            "the dates are written in two ways", where=where, do="state --rate instead", code="bad-stamp"
        )
    european = _calendar(year, parts["b"], parts["a"], kept, rows, where, first_line) if day_first else None
    american = _calendar(year, parts["a"], parts["b"], kept, rows, where, first_line) if month_first else None
    if european is None or american is None:
        return european if european is not None else american  # type: ignore[return-value]
    if np.array_equal(european - european[0], american - american[0]):
        return european
    dotted = bool(kept.str.contains(r"^\d{1,2}\.", regex=True).all())
    if dotted:
        return european
    raise LogError(
        f"the date {kept.iloc[-1]!r} can be read day first or month first",
        where=where,
        do="write the dates as 2024-01-31, or state --rate",
        code="ambiguous",
    )


def _calendar(
    year: Any, month: Any, day: Any, kept: Any, rows: NDArray[np.intp], where: str, first_line: int
) -> Array:
    import pandas as pd

    text = year.astype(str) + "-" + month.str.zfill(2) + "-" + day.str.zfill(2)
    moments = pd.to_datetime(text, format="%Y-%m-%d", errors="coerce")
    _refuse(moments.isna(), kept, rows, where, first_line)
    return np.asarray(moments.to_numpy(dtype="datetime64[D]").astype(np.int64), dtype=float)


def _refuse(wrong: Any, kept: Any, rows: NDArray[np.intp], where: str, first_line: int) -> None:
    bad = np.flatnonzero(np.asarray(wrong, dtype=bool))
    if bad.size:
        raise LogError(
            f"{kept.iloc[int(bad[0])]!r} is no stamp as the others are",
            where=f"{where}, line {first_line + int(rows[bad[0]])}",
            do="mend the stamp or take the line out",
            code="bad-stamp",
        )
