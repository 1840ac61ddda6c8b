"""One record written in the many ways in which loggers write: for the tests and benchmarks of reading."""

from __future__ import annotations

import datetime
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

BEGIN = datetime.datetime(2024, 3, 5, 23, 59, 59, 200000)
ROWS = 240
INTERVAL = 0.0125


def record() -> list[tuple[float, float, float, float]]:
    """Time (s), pressure (kPa), speed (rpm, whole numbers), temperature (°C): as printed, exactly.

    Decimals, values below 1, above 1000 and above 1 000 000 and negative ones all occur.
    """
    rng = np.random.default_rng(11)
    out = []
    for k in range(ROWS):
        p = round(101.325 + 60.0 * np.sin(k / 9.0) + rng.normal(0, 0.4), 3)
        n = float(round(1480 + 900 * np.cos(k / 31.0)))
        z = round(rng.normal(0, 1500.0) * (1000.0 if k % 60 == 7 else 1.0), 2)
        out.append((round(k * INTERVAL, 4), float(p), n, float(z)))
    return out


@dataclass(frozen=True)
class LogForm:
    """One way to write the record."""

    separator: str
    decimal: str
    thousands: str
    encoding: str
    preamble: str
    stamps: str
    ends: str = "\n"
    quoted: bool = False

    @property
    def name(self) -> str:
        sign = {"\t": "tab", " ": "space", ",": "comma", ";": "semicolon", ".": "point", "'": "high",
                "\u00a0": "hard", "": "none", "|": "bar", "\u202f": "thin"}  # fmt: skip
        return "-".join(
            [sign[self.separator], sign[self.decimal], sign[self.thousands], self.encoding, self.preamble,
             self.stamps, "quoted" if self.quoted else "bare", "crlf" if self.ends == "\r\n" else "lf"]
        )  # fmt: skip

    @property
    def ambiguous(self) -> bool:
        """Files that two readings fit, named beforehand: a mark that also separates, not told apart."""
        return self.separator == self.decimal and not self.quoted

    def cell(self, value: float, places: int) -> str:
        text = f"{value:,.{places}f}".replace(",", "T").replace(".", "D")
        return text.replace("T", self.thousands).replace("D", self.decimal)

    def stamp(self, seconds: float) -> list[str]:
        moment = BEGIN + datetime.timedelta(seconds=seconds)
        fraction = f"{moment.microsecond // 100:04d}"
        clock = f"{moment:%H:%M:%S}{self.decimal}{fraction}"
        if self.stamps == "seconds":
            return [self.cell(seconds, 4)]
        if self.stamps == "milliseconds":
            return [self.cell(1000 * seconds, 1)]
        if self.stamps == "iso":
            return [f"{moment:%Y-%m-%dT%H:%M:%S}.{fraction}"]
        if self.stamps == "iso-comma":
            return [f"{moment:%Y-%m-%d %H:%M:%S},{fraction}"]
        if self.stamps == "iso-zone":
            return [f"{moment:%Y-%m-%dT%H:%M:%S}.{fraction}+01:00"]
        if self.stamps == "dotted":
            return [f"{moment:%d.%m.%Y} {clock}"]
        if self.stamps == "two-columns":
            return [f"{moment:%Y-%m-%d}", clock]
        if self.stamps == "clock":
            return [clock]
        return []

    def heading(self) -> list[str]:
        time = {"seconds": ("t", "s"), "milliseconds": ("t", "ms"), "two-columns": ("", ""), "none": ("", "")}
        channels = [("p", "kPa"), ("n", "rpm"), ("T", "°C")]
        stamp = [time[self.stamps]] if self.stamps in ("seconds", "milliseconds") else []
        if self.stamps == "two-columns":
            stamp = [("date", ""), ("time", "")]
        elif not stamp and self.stamps != "none":
            stamp = [("time", "")]
        every = [*stamp, *channels]
        join = self.separator.join
        if self.preamble in ("bracketed", "commented"):
            line = join(f"{n}[{u}]" if u else n for n, u in every)
            return [line] if self.preamble == "bracketed" else ["# bench 4", "# " + line]
        if self.preamble == "unit-row":
            return [join(n for n, _ in every), join(u or "-" for _, u in every)]
        blank = "" if self.separator == " " else " "
        names = join(f"{n}{blank}[{u}]" if u else n for n, u in every)
        above = ["Bench: 4", "Operator = B. Meier, night shift", "", "Sampling rate: 80 Hz", "", "Notes:"]
        return [*above, names]

    def text(self) -> str:
        lines = self.heading()
        for t, p, n, z in record():
            cells = [*self.stamp(t), self.cell(p, 3), self.cell(n, 0), self.cell(z, 2)]
            if self.quoted:
                cells = [f'"{cell}"' for cell in cells]
            lines.append(self.separator.join(cells))
        return self.ends.join(lines) + self.ends

    def bytes(self) -> bytes:
        return self.text().encode(self.encoding)


def forms() -> Iterator[LogForm]:
    """Separator × decimal sign × thousands mark × stamps, each with an encoding and a preamble in turn."""
    encodings = ("utf-8", "utf-8-sig", "utf-16", "cp1252")
    preambles = ("bracketed", "unit-row", "long", "commented")
    stamps = ("seconds", "milliseconds", "iso", "iso-comma", "iso-zone", "dotted", "two-columns", "clock")
    turn = 0
    for separator in ("\t", ";", ",", "|", " "):
        for decimal in (".", ","):
            for thousands in ("", ".", ",", "'", "\u00a0"):
                for stamp in stamps:
                    if thousands == decimal or (separator == " " and thousands == "\u00a0"):
                        continue
                    # a blank inside a stamp, or a mark that separates, stands in quotes
                    inside = separator in (decimal, thousands) or (separator == "," and stamp == "iso-comma")
                    quoted = inside or (separator == " " and stamp in ("iso-comma", "dotted"))
                    ends = "\r\n" if turn % 3 == 0 else "\n"
                    encoding, preamble = encodings[turn % 4], preambles[turn // 4 % 4]
                    yield LogForm(separator, decimal, thousands, encoding, preamble, stamp, ends, quoted)
                    turn += 1
    # without quotes the decimal comma separates, too
    for encoding in encodings:
        for preamble in ("bracketed", "long"):
            yield LogForm(",", ",", "", encoding, preamble, "seconds")
