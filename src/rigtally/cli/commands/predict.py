"""rigtally predict RIG"""

from __future__ import annotations

from typing import Any

import click

from rigtally.cli.options import SEED_OPTION, output_options


@click.command("predict")
@click.argument("rig", metavar="RIG")
@click.option("--formula", "as_formula", is_flag=True, help="Print the transfer functions in symbols.")
@click.option(
    "--monte-carlo",
    type=click.IntRange(min=1000),
    metavar="N",
    help="At most N draws of the tolerances (JCGM 101), beside the first-order uncertainty.",
)
@output_options
@SEED_OPTION
def command(rig: str, as_formula: bool, monte_carlo: int | None, **options: Any) -> None:
    """Predict transfer matrix, K, ωn and ζ with uncertainty from a rig file."""
    from rigtally.cli.output import emit
    from rigtally.physics.prediction import predict
    from rigtally.physics.rig_file import load_rig

    checked = load_rig(rig)
    if as_formula:
        from rigtally.physics.formula import formula

        emit(
            formula(checked),
            as_json=options["as_json"],
            save_file=options["save_file"],
            quiet=options["quiet"],
        )
        return
    emit(
        predict(checked, monte_carlo=monte_carlo or 0, seed=options["seed"]),
        as_json=options["as_json"],
        report_file=options["report_file"],
        save_file=options["save_file"],
        quiet=options["quiet"],
        rig=checked,
    )
