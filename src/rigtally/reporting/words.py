"""Sentences that terminal and page share."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from rigtally.reporting.numbers import percent, plain, quantity

if TYPE_CHECKING:
    from rigtally.tallying.decision import Decision
    from rigtally.tallying.explanation import Explanation
    from rigtally.tallying.result import Tally

CAUTION = (
    "A result of this program does not replace a risk assessment. Rigs under pressure, with rotating parts or with "
    "dangerous supply voltages can injure: follow the local codes and have the work done by licensed or qualified "
    "people. A rating that others rely on for safety has to be released by whoever is responsible for it."
)

NAMES = {
    "gain": "gain K",
    "natural_frequency": "natural frequency ωn",
    "damping_ratio": "damping ratio ζ",
    "time_constant": "time constant τ",
    "zero_time": "zero time τz",
    "dead_time": "dead time",
    "natural_frequency_hz": "natural frequency fn",
    "damped_frequency": "damped frequency ωd",
    "overshoot": "step overshoot",
    "corner_frequency_hz": "corner frequency",
}


def spoken(name: str) -> str:
    """A parameter's name in words, its entry kept."""
    base, bracket, rest = name.partition("(")
    return NAMES.get(base, base.replace("_", " ")) + (f" ({rest}" if bracket else "")


def verdict_sentence(tally: Tally) -> str:
    """The verdict in one sentence."""
    head = {
        "agrees": "Bench and model agree.",
        "differs": "Bench and model differ.",
        "undecided": "Undecided: the comparison cannot tell.",
    }[tally.verdict]
    reason = tally.reason[:1].upper() + tally.reason[1:].rstrip(".")
    return f"{head} {reason}." if reason else head


def decided(decision: Decision) -> str:
    """A decision against limits in one sentence."""
    word = {True: "accepted", False: "rejected", None: "not determined"}[decision.accepted]
    low = "−∞" if decision.lower is None else plain(decision.lower)
    high = "∞" if decision.upper is None else plain(decision.upper)
    return (
        f"{spoken(decision.name)}: {quantity(decision.quantity)} against {low} to {high} ({decision.rule} rule): "
        f"{word}, probability of conformity {percent(decision.conformity)}"
    )


def change(explanation: Explanation) -> str:
    """What moves, by how much: "gauge chamber.compliance +66.6 % (+19.2 u)"."""
    parts = []
    for name, relative, steps in zip(explanation.elements, explanation.change, explanation.in_u, strict=True):
        moved = f"{'+' if relative >= 0 else '−'}{percent(abs(relative))}" if math.isfinite(relative) else "?"
        own = (
            f" ({'+' if steps >= 0 else '−'}{abs(steps):.1f} u)"
            if math.isfinite(steps)
            else " (taken as exact)"
        )
        parts.append(f"{name} {moved}{own}")
    return " and ".join(parts)
