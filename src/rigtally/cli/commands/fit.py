"""rigtally fit LOG…"""

from __future__ import annotations

from typing import Any

import click

from rigtally.cli.options import SEED_OPTION, fit_options, log_options, output_options


@click.command("fit")
@click.argument("logs", nargs=-1, required=True, metavar="LOG...")
@log_options
@fit_options
@output_options
@SEED_OPTION
def command(logs: tuple[str, ...], **options: Any) -> None:
    """Fit one form to one or more logs.

    Several logs are repeats of one test and are fitted together.
    """
    from rigtally.cli.logs import choose_channels, fit_keywords, read_logs, unlogged
    from rigtally.cli.output import emit
    from rigtally.estimation.fit import fit
    from rigtally.records.record import Response

    records = read_logs(logs, options)
    keywords = fit_keywords(options)
    if isinstance(records[0], Response):
        result: Any = fit(records if len(records) > 1 else records[0], **keywords)
    else:
        inputs, outputs = choose_channels(
            records[0], options["inputs"], options["outputs"], input_is_logged=not unlogged(options)
        )
        one = records if len(records) > 1 else records[0]
        result = fit(one, inputs=inputs, outputs=outputs, **keywords)
    emit(
        result,
        as_json=options["as_json"],
        report_file=options["report_file"],
        save_file=options["save_file"],
        quiet=options["quiet"],
    )
