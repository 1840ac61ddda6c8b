"""Results on a terminal: the verdict first, then tables."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import TYPE_CHECKING, Any

from rich.console import Console
from rich.markup import escape
from rich.table import Table

from rigtally.reporting.numbers import engineering, interval, percent, plain, quantity
from rigtally.reporting.words import CAUTION, change, decided, spoken, verdict_sentence

if TYPE_CHECKING:
    from rigtally.estimation.result import Fit
    from rigtally.physics.prediction_result import Prediction
    from rigtally.records.inspection import Inspection
    from rigtally.tallying.result import Tally

_COLOUR = {"agrees": "green", "differs": "red", "undecided": "yellow"}


def render(result: Any, console: Console) -> None:
    """Print a result; what has no table of its own prints its `plain` text."""
    show = _SHOWN.get(type(result).__name__)
    if show is None:
        console.print(escape(str(result.plain)), soft_wrap=True)
    else:
        show(result, console)


def _table(title: str, *columns: str) -> Table:
    table = Table(title=title, title_justify="left", title_style="bold", box=None, pad_edge=False)
    for k, column in enumerate(columns):
        table.add_column(column, justify="left" if k == 0 else "right", overflow="fold")
    return table


def _rows(table: Table, rows: Iterable[Iterable[str]], console: Console) -> None:
    for row in rows:
        table.add_row(*(escape(cell) for cell in row))
    if table.row_count:
        console.print(table)
        console.print()


def _warnings(warnings: Iterable[Any], console: Console) -> None:
    for warning in warnings:
        console.print(f"[yellow]note[/] {escape(warning.code)}: {escape(warning.text)}", soft_wrap=True)


def show_fit(fit: Fit, console: Console) -> None:
    """Parameters, what follows from them, the residual, notes."""
    table = _table(
        f"Fit: {fit.form.name}, {fit.road} road, {fit.samples} samples", "parameter", "value ± u", "95 %"
    )
    _rows(table, ([spoken(n), quantity(q), interval(q)] for n, q in fit.parameters.items()), console)
    table = _table("What follows", "quantity", "value ± u", "95 %")
    _rows(table, ([spoken(n), quantity(q), interval(q)] for n, q in fit.derived.items()), console)
    _residuals(fit, console)
    _warnings(fit.warnings, console)


def _residuals(fit: Fit, console: Console) -> None:
    for r in fit.residual:
        size = engineering(r.rms, r.unit)
        console.print(
            f"{escape(r.output)}: the fit explains {percent(r.explained, 3)}; residual {escape(size)} rms, {r.noise}",
            soft_wrap=True,
        )
    if fit.roads_agree is not None:
        console.print("time and frequency road " + ("agree" if fit.roads_agree else "[red]disagree[/]"))
    console.print()


def show_prediction(prediction: Prediction, console: Console) -> None:
    """Parameters with their leading contributions, limits, notes."""
    table = _table(
        f"Prediction: {prediction.title} ({prediction.form.name})", "parameter", "value ± u", "mostly from"
    )
    rows = []
    for name, q in prediction.parameters.items():
        shares = sorted(prediction.budget.get(name, []), key=lambda s: -s[2])[:2]
        lead = ", ".join(
            f"{owner} {key} {percent(share, 0)}" for owner, key, share in shares if share > 0.005
        )
        rows.append([spoken(name), quantity(q), lead])
    _rows(table, rows, console)
    for limit in prediction.limits:
        console.print(f"limit {escape(limit.code)}: {escape(limit.text)}", soft_wrap=True)
    _warnings(prediction.warnings, console)


def show_tally(tally: Tally, console: Console) -> None:
    """The verdict, the side-by-side table, the explanation, notes."""
    console.print(f"[bold {_COLOUR[tally.verdict]}]{escape(verdict_sentence(tally))}[/]", soft_wrap=True)
    console.print()
    table = _table(escape(tally.prediction.title), "parameter", "fitted", "predicted", "E_n", "")
    rows = []
    for name, p in tally.parameters.items():
        word = {True: "agrees", False: "differs", None: p.status}[p.agrees]
        rows.append([spoken(name), quantity(p.fitted), quantity(p.predicted), plain(p.en, 2), word])
    _rows(table, rows, console)
    joint = tally.joint
    console.print(
        f"joint distance {plain(joint.chi2, 3)} with {joint.dof} degrees of freedom, p = {plain(joint.p, 2)} "
        f"(decides the verdict; a single E_n does not)",
        soft_wrap=True,
    )
    console.print()
    if tally.verdict == "differs":
        table = _table("What would explain it", "value", "left", "cannot be told apart from")
        _rows(
            table,
            (
                [
                    change(e) + (f": {e.trouble}" if e.trouble else ""),
                    plain(e.chi2_left, 3),
                    ", ".join(e.indistinguishable) or "–",
                ]
                for e in tally.explanations[:5]
            ),
            console,
        )
    for decision in (*tally.within, *tally.limits):
        console.print(escape(decided(decision)), soft_wrap=True)
    _residuals(tally.fit, console)
    _warnings((*tally.fit.warnings, *tally.prediction.warnings, *tally.warnings), console)
    console.print(f"[dim]{escape(CAUTION)}[/]", soft_wrap=True)


def show_inspection(found: Inspection, console: Console) -> None:
    """How the file was read, channels, clock, events, what to run next."""
    record = found.record
    for line in record.provenance.how_read:
        console.print(escape(line), soft_wrap=True)
    console.print()
    from rigtally.records.record import Record

    if isinstance(record, Record):
        document = found.to_dict()
        clock = document["clock"]
        console.print(
            f"{record.count} samples, interval {plain(clock['interval'])} s, jitter {plain(clock['jitter'], 2)} s"
            + ("" if clock["uniform"] else " (not uniform: the true stamps are used)")
        )
        for fault in record.clock_faults:
            console.print(f"[yellow]clock[/] {escape(fault.text)}", soft_wrap=True)
        console.print()
        table = _table("Channels", "name", "unit", "least", "largest", "resolution", "faults")
        rows = []
        for channel, row in zip(record.channels, document["channels"], strict=True):
            ends = [plain(row[k]) if row[k] is not None else "–" for k in ("min", "max", "resolution")]
            faults = "; ".join(f.text for f in channel.faults) or "none found"
            rows.append([channel.name, channel.unit if channel.unit_known else "not stated", *ends, faults])
        _rows(table, rows, console)
    table = _table("Events", "event", "kind", "channel", "start (s)", "before", "after", "what answers")
    rows = []
    for event in found.events:
        answers = []
        for name, features in event.responses.items():
            some = [
                f"{k.replace('_', ' ')} {quantity(q)}" for k, q in list(features.items())[:3] if q.determined
            ]
            answers.append(f"{name}: " + ", ".join(some))
        rows.append(
            [
                str(event.number), event.kind, event.channel, quantity(event.start, unit=False),
                quantity(event.level_before), quantity(event.level_after), "; ".join(answers) or "–",
            ]
        )  # fmt: skip
    _rows(table, rows, console)
    for code, text in found.warnings:
        console.print(f"[yellow]note[/] {escape(code)}: {escape(text)}", soft_wrap=True)
    console.print("to run next:")
    for line in found.next_commands:
        console.print(f"  {escape(line)}", soft_wrap=True)


# by name: a fit on a terminal does not import the rooms of a tally
_SHOWN: dict[str, Callable[[Any, Console], None]] = {
    "Tally": show_tally,
    "Fit": show_fit,
    "Prediction": show_prediction,
    "Inspection": show_inspection,
}
