"""Where a result goes: terminal, JSON on standard output, a saved file, a report."""

from __future__ import annotations

import json
import math
from typing import Any

import click

from rigtally.files import write_whole


def emit(
    result: Any,
    *,
    as_json: bool,
    report_file: str | None = None,
    save_file: str | None = None,
    quiet: bool = False,
    rig: Any = None,
) -> None:
    """Write what was asked for; the files first, so that what is printed is true."""
    if save_file:
        write_whole(save_file, document(result))
    if report_file:
        from rigtally.reporting.page import report

        report(result, report_file, rig=rig)
    if as_json:
        click.echo(document(result), nl=False)
    elif not quiet:
        from rich.console import Console

        from rigtally.reporting.terminal import render

        render(result, Console(highlight=False))
        for label, name in (("report", report_file), ("saved", save_file)):
            if name:
                click.echo(f"{label}: {name}")


def document(result: Any) -> str:
    """A result as one JSON document; what is not finite is null."""
    return json.dumps(_plain(result.to_dict()), ensure_ascii=False, allow_nan=False, indent=1) + "\n"


def _plain(thing: Any) -> Any:
    """Numbers that JSON knows: numpy scalars and arrays unpacked, NaN and infinities null."""
    if isinstance(thing, dict):
        return {str(key): _plain(value) for key, value in thing.items()}
    if isinstance(thing, list | tuple):
        return [_plain(value) for value in thing]
    if isinstance(thing, str | bool) or thing is None:
        return thing
    if hasattr(thing, "tolist"):
        return _plain(thing.tolist())
    if isinstance(thing, int):
        return thing
    if isinstance(thing, complex):
        return [_plain(thing.real), _plain(thing.imag)]
    number = float(thing)
    return number if math.isfinite(number) else None
