"""rigtally inspect LOG"""

from __future__ import annotations

from typing import Any

import click

from rigtally.cli.options import log_options, output_options


@click.command("inspect")
@click.argument("log", metavar="LOG")
@log_options
@output_options
def command(log: str, **options: Any) -> None:
    """Say what is in a log: channels, units, clock, faults, events, and what to run next."""
    from rigtally.cli.logs import read_logs
    from rigtally.cli.output import emit
    from rigtally.records.inspection import inspect

    (record,) = read_logs([log], options)
    emit(
        inspect(record, inputs=options["inputs"], outputs=options["outputs"]),
        as_json=options["as_json"],
        report_file=options["report_file"],
        save_file=options["save_file"],
        quiet=options["quiet"],
    )
