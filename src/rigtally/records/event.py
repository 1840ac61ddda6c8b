"""Event: one thing that was done to the rig, as the record shows it. Frozen."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

from rigtally.quantities.uncertain import Uncertain

Kind = Literal["step", "ramp", "release", "pulse", "sweep", "dwell", "broadband"]


@dataclass(frozen=True)
class Event:
    """One step, ramp, release, pulse, sweep, dwell or stretch of broadband motion.

    Attributes
    ----------
    number : int
        From 1, in the order of time.
    kind : str
    channel : str
        In which it was found.
    unit : str
        SI-coherent unit of that channel.
    start : Uncertain
        Seconds on the record's own scale; u NaN where the record begins in the middle of it.
    level_before, level_after : Uncertain
        Levels at rest; NaN where the record shows none.
    features : mapping of name to Uncertain
        Of the channel itself: step features for a step, `rate` and `duration` for a ramp, `height`, `width`
        and `area` for a pulse, `frequency`, `amplitude` for a dwell, `frequency_from`, `frequency_to` for a
        sweep.
    responses : mapping of channel to such a mapping
        The same for the channels that answer.
    window : (begin, end)
        Seconds: the part of the record that belongs to it alone.
    """

    number: int
    kind: Kind
    channel: str
    unit: str
    start: Uncertain
    level_before: Uncertain
    level_after: Uncertain
    window: tuple[float, float]
    features: Mapping[str, Uncertain] = field(default_factory=dict)
    responses: Mapping[str, Mapping[str, Uncertain]] = field(default_factory=dict)

    @property
    def size(self) -> float:
        """Level after less level before; the height of a pulse; the amplitude of a dwell."""
        for name in ("height", "amplitude"):
            if self.kind in ("pulse", "dwell") and name in self.features:
                return self.features[name].value
        return self.level_after.value - self.level_before.value

    @property
    def direction(self) -> int:
        """+1 upwards, −1 downwards, 0 where it has none."""
        size = self.size
        if not math.isfinite(size) or self.kind in ("dwell", "sweep", "broadband"):
            return 0
        return 1 if size > 0 else -1

    def to_dict(self) -> dict[str, Any]:
        """For JSON."""

        def mapped(features: Mapping[str, Uncertain]) -> dict[str, Any]:
            return {name: value.to_dict() for name, value in features.items()}

        return {
            "number": self.number,
            "kind": self.kind,
            "channel": self.channel,
            "start": self.start.to_dict(),
            "level_before": self.level_before.to_dict(),
            "level_after": self.level_after.to_dict(),
            "window": list(self.window),
            "features": mapped(self.features),
            "responses": {name: mapped(features) for name, features in self.responses.items()},
        }
