"""Decimal sign and thousands mark, decided by evidence; without evidence refused, never guessed."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from rigtally.records.csv_cells import HIGH_COMMAS, READINGS, SPACES, Marks, number

# cells that must speak for one reading and against the other before it is believed
WITNESSES = 2
# share of those that may speak the other way (damaged cells)
DISSENT = 0.2
# share of the cells that may be no number under the reading (damaged cells)
DAMAGED = 0.1


@dataclass(frozen=True)
class Verdict:
    """The readings that are left, best first, and a cell that they read differently.

    `marks` is None where no reading fits.
    """

    marks: Marks | None
    rival: Marks | None = None
    cell: str = ""
    seen: bool = False

    @property
    def open(self) -> bool:
        """Two readings are left that give different numbers."""
        return self.rival is not None


def allowed_readings(separator: str, decimal: str | None, thousands: str | None) -> list[Marks]:
    """Readings that agree with what the user states ("" for no thousands mark)."""
    return [
        marks
        for marks in READINGS
        if (decimal is None or marks.decimal == decimal)
        and (thousands is None or marks.thousands == thousands)
        and not (separator == " " and marks.thousands == " ")
    ]


def decide(cells: Sequence[str], readings: Sequence[Marks], separator: str) -> Verdict:
    """The reading of the cells' marks.

    Parameters
    ----------
    cells : sequence of str
        Unquoted cells of the number columns; each is a number under some reading.
    readings : sequence of Marks
        Those that may be.
    separator : str
        With a comma between columns (and none inside them) a point is the decimal sign.
    """
    cells = list(dict.fromkeys(cells))
    signs = set("".join(cells))
    seen = bool(signs & set(".," + SPACES + HIGH_COMMAS))
    family = {" ": SPACES, "'": HIGH_COMMAS}
    useful = [
        marks
        for marks in readings
        if not marks.thousands or signs & set(family.get(marks.thousands, marks.thousands))
    ] or list(readings)
    values = {marks: [number(cell, marks) for cell in cells] for marks in useful}
    fits = {marks: sum(value is not None for value in found) for marks, found in values.items()}
    best = max(useful, key=lambda marks: fits[marks])
    if fits[best] < (1.0 - DAMAGED) * len(cells) or not cells:
        return Verdict(None, seen=seen)
    if separator == "," and "," not in signs:
        # a point between thousands goes with a decimal comma, which would have to stand in quotes
        plain = Marks(".", "")
        if plain in useful and fits[plain] == fits[best]:
            return Verdict(plain, seen=seen)
    for other in useful:
        if other == best:
            continue
        rival = _rival(cells, values[best], values[other])
        if rival is not None:
            return Verdict(best, other, rival, seen)
    return Verdict(best, seen=seen)


def _rival(cells: Sequence[str], best: list[float | None], other: list[float | None]) -> str | None:
    """A cell that shows the other reading to be possible with other numbers, or None."""
    pairs = list(zip(cells, best, other, strict=True))
    differ = [cell for cell, a, b in pairs if a is not None and b is not None and a != b]
    if not differ:
        return None
    speak_for = sum(a is not None and b is None for _, a, b in pairs)
    against = sum(a is None and b is not None for _, a, b in pairs)
    if speak_for >= WITNESSES and against <= DISSENT * speak_for:
        return None
    return differ[0]
