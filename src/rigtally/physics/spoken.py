"""Quantities as they are spoken: which variable is meant, and its unit."""

from __future__ import annotations

from dataclasses import dataclass

from rigtally.errors import RigError


@dataclass(frozen=True)
class Spoken:
    """What a word means: an across or a through variable, times s^power (−1 is its integral).

    `level` is a pressure over ρ g.
    """

    across: bool
    power: int
    unit: str
    level: bool = False


WORDS: dict[str, Spoken] = {
    "velocity": Spoken(True, 0, "m/s"),
    "angular velocity": Spoken(True, 0, "rad/s"),
    "voltage": Spoken(True, 0, "V"),
    "pressure": Spoken(True, 0, "Pa"),
    "temperature": Spoken(True, 0, "K"),
    "force": Spoken(False, 0, "N"),
    "torque": Spoken(False, 0, "N*m"),
    "current": Spoken(False, 0, "A"),
    "flow": Spoken(False, 0, "m^3/s"),
    "volume flow": Spoken(False, 0, "m^3/s"),
    "heat flow": Spoken(False, 0, "W"),
    "displacement": Spoken(True, -1, "m"),
    "angle": Spoken(True, -1, "rad"),
    "charge": Spoken(False, -1, "C"),
    "volume": Spoken(False, -1, "m^3"),
    "acceleration": Spoken(True, 1, "m/s^2"),
    "angular acceleration": Spoken(True, 1, "rad/s^2"),
    "level": Spoken(True, 0, "m", level=True),
}


def spoken(word: str, owner: str) -> Spoken:
    """What the word means.

    Raises
    ------
    RigError
        code "unknown-quantity".
    """
    found = WORDS.get(word)
    if found is None:
        raise RigError(
            f"{owner}: quantity {word!r} is not known",
            do="choose one of: " + ", ".join(WORDS),
            code="unknown-quantity",
        )
    return found
