"""Options that several commands share, and how their texts become values."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import Any, TypeVar

import click

from rigtally.errors import UsageError

F = TypeVar("F", bound=Callable[..., Any])


def _stack(decorators: Iterable[Callable[[F], F]]) -> Callable[[F], F]:
    def apply(function: F) -> F:
        for decorator in reversed(list(decorators)):
            function = decorator(function)
        return function

    return apply


LOG_OPTIONS = (
    click.option("--input", "inputs", multiple=True, metavar="NAME", help="Input channel; may be repeated."),
    click.option(
        "--output", "outputs", multiple=True, metavar="NAME", help="Output channel; may be repeated."
    ),
    click.option("--time", "time_name", metavar="NAME", help="The column that holds the time."),
    click.option("--rate", metavar="RATE", help='Sampling rate where the log has no time, as "1 kHz".'),
    click.option("--unit", "units", multiple=True, metavar="NAME=UNIT", help="Unit of a channel, as p=kPa."),
    click.option("--from", "begin", type=float, metavar="T", help="Use the log from this time (s)."),
    click.option("--to", "end", type=float, metavar="T", help="Use the log up to this time (s)."),
    click.option("--event", type=int, metavar="N", help="Use only event N as `inspect` counts them."),
    click.option("--separator", metavar="SIGN", help="What separates the columns of a text log."),
    click.option("--decimal", metavar="SIGN", help="The decimal sign of a text log."),
    click.option("--thousands", metavar="SIGN", help="The thousands mark of a text log."),
    click.option("--encoding", metavar="NAME", help="The encoding of a text log."),
)

FIT_OPTIONS = (
    click.option(
        "--form", metavar="NAME", help="Form to fit (second-order, first-order-rate, rational-1/3, …)."
    ),
    click.option("--dead-time", is_flag=True, help="Fit a dead time too."),
    click.option(
        "--road",
        type=click.Choice(["time", "frequency", "both"]),
        default="frequency",
        help="Which road's numbers to print; the other checks them (default: frequency).",
    ),
    click.option(
        "--between",
        type=click.Choice(["held", "ramped", "band-limited"]),
        help="What the input does between its samples.",
    ),
    click.option(
        "--output-first", is_flag=True, help="The logger reads the output before a held input acts."
    ),
    click.option("--set", "held", multiple=True, metavar="NAME=VALUE", help="Hold a parameter."),
    click.option("--range", "ranges", multiple=True, metavar="NAME=LOW:HIGH", help="Keep it between bounds."),
    click.option("--tie", "ties", multiple=True, metavar="NAME=EXPRESSION", help='Tie it, as "a0=2*a1".'),
    click.option(
        "--offset", default="free", metavar="free|VALUE", help="The output's offset (default: free)."
    ),
    click.option("--drift", type=click.Choice(["free", "none"]), help="A straight drift of the output."),
    click.option("--start", type=click.Choice(["free", "rest"]), default="free", help="State at the start."),
    click.option(
        "--noise",
        default="estimated",
        metavar="estimated|white|u=VALUE",
        help="What is known of the output's noise (default: estimated).",
    ),
    click.option("--step-at", type=float, metavar="T", help="An input step at T (s) that was not logged."),
    click.option("--step-size", metavar="SIZE", help='Its height with its unit, as "20 kPa".'),
    click.option("--release-at", type=float, metavar="T", help="Release from a displaced position at T (s)."),
    click.option("--pulse-at", type=float, metavar="T", help="A short pulse at T (s) that was not logged."),
    click.option("--pulse-area", metavar="AREA", help='Its area with its unit, as "0.5 N*s".'),
)

OUTPUT_OPTIONS = (
    click.option(
        "--json", "as_json", is_flag=True, help="One JSON document on standard output, nothing else."
    ),
    click.option("--report", "report_file", type=click.Path(dir_okay=False), help="Write an HTML report."),
    click.option("--save", "save_file", type=click.Path(dir_okay=False), help="Write the result as JSON."),
    click.option("--quiet", is_flag=True, help="No progress and no table."),
)

SEED_OPTION = click.option(
    "--seed", type=int, default=0, show_default=True, help="Seed of every random draw."
)


def log_options(function: F) -> F:
    """--input, --output, --time, --rate, --unit and how a text log is written."""
    return _stack(LOG_OPTIONS)(function)


def fit_options(function: F) -> F:
    """Form, road, assumptions and constraints of a fit."""
    return _stack(FIT_OPTIONS)(function)


def output_options(function: F) -> F:
    """--json, --report, --save, --quiet."""
    return _stack(OUTPUT_OPTIONS)(function)


def pairs(texts: Iterable[str], option: str) -> dict[str, str]:
    """NAME=TEXT options as a mapping."""
    out: dict[str, str] = {}
    for text in texts:
        name, sign, value = text.partition("=")
        if not sign or not name.strip() or not value.strip():
            raise UsageError(
                f"{option} {text!r} is not NAME=…", do=f"write {option} name=value", code="bad-option"
            )
        out[name.strip()] = value.strip()
    return out


def number(text: str, option: str) -> float:
    """A plain number of an option."""
    try:
        return float(text)
    except ValueError:
        raise UsageError(f"{option} needs a number, not {text!r}", code="bad-option") from None


def held_values(texts: Iterable[str]) -> dict[str, float]:
    """--set NAME=VALUE."""
    return {name: number(value, f"--set {name}") for name, value in pairs(texts, "--set").items()}


def range_values(texts: Iterable[str]) -> dict[str, tuple[float, float]]:
    """--range NAME=LOW:HIGH; an empty side is open."""
    out: dict[str, tuple[float, float]] = {}
    for name, value in pairs(texts, "--range").items():
        low, sign, high = value.partition(":")
        if not sign:
            raise UsageError(
                f"--range {name}={value!r} is not LOW:HIGH",
                do=f"write --range {name}=0.1:1 (an empty side is open)",
                code="bad-option",
            )
        ends = (
            number(low, f"--range {name}") if low.strip() else float("-inf"),
            number(high, f"--range {name}") if high.strip() else float("inf"),
        )
        if not ends[0] < ends[1]:
            raise UsageError(f"--range {name}: {ends[0]:g} is not below {ends[1]:g}", code="bad-option")
        out[name] = ends
    return out


def noise_value(text: str) -> float | str:
    """--noise estimated | white | u=VALUE."""
    if text in ("estimated", "white"):
        return text
    name, sign, value = text.partition("=")
    if name.strip() == "u" and sign:
        found = number(value, "--noise u")
        if found > 0:
            return found
    raise UsageError(
        f"--noise {text!r} is none of estimated, white, u=VALUE",
        do="write --noise u=0.02 (the output's standard uncertainty per sample, SI)",
        code="bad-option",
    )


def offset_value(text: str) -> float | str:
    """--offset free | VALUE."""
    return text if text == "free" else number(text, "--offset")
