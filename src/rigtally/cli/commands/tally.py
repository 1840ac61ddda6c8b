"""rigtally tally LOG… RIG"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import click

from rigtally.cli.options import SEED_OPTION, fit_options, log_options, output_options
from rigtally.errors import UsageError


@click.command("tally")
@click.argument("files", nargs=-1, required=True, metavar="LOG... RIG")
@log_options
@fit_options
@click.option(
    "--monte-carlo", type=click.IntRange(min=1000), metavar="N", help="Draws of the tolerances at most."
)
@click.option("--enforce", is_flag=True, help="Leave with exit code 1 unless bench and model agree.")
@click.option(
    "--save-rig", type=click.Path(dir_okay=False), help="Write a rig file with the reconciled values."
)
@output_options
@SEED_OPTION
def command(files: tuple[str, ...], **options: Any) -> int:
    """Fit the log, predict from the rig file, and set one against the other.

    LOG... are repeats of one test; RIG is the rig file (.toml).
    """
    rig_file, logs = _sort(files)
    from rigtally.cli.logs import fit_keywords, read_logs, rig_channels
    from rigtally.cli.output import emit
    from rigtally.estimation.fit import fit
    from rigtally.physics.prediction import predict
    from rigtally.physics.rig_file import load_rig
    from rigtally.tallying.tally import tally

    rig = load_rig(rig_file)
    prediction = predict(rig, monte_carlo=options["monte_carlo"] or 0, seed=options["seed"])
    records = read_logs(logs, options, rig)
    keywords = fit_keywords(options)
    inputs, outputs = rig_channels(rig, records[0])
    keywords.setdefault("form", prediction.form)
    keywords.setdefault("between", _between(rig.drives))
    if rig.fit.get("dead_time"):
        keywords["dead_time"] = True
    fitted = fit(
        records if len(records) > 1 else records[0],
        inputs=list(options["inputs"]) or inputs,
        outputs=list(options["outputs"]) or outputs,
        **keywords,
    )
    result = tally(fitted, prediction, rig=rig, seed=options["seed"])
    result = replace(result, warnings=(*result.warnings, *_limits_met(rig, prediction, fitted)))
    if options["save_rig"]:
        from rigtally.physics.write_back import save_rig

        save_rig(rig, result.reconciled_values, options["save_rig"])
    emit(
        result,
        as_json=options["as_json"],
        report_file=options["report_file"],
        save_file=options["save_file"],
        quiet=options["quiet"],
        rig=rig,
    )
    return 1 if options["enforce"] and result.verdict != "agrees" else 0


def _sort(files: tuple[str, ...]) -> tuple[str, list[str]]:
    """The rig file (the one .toml) and the logs."""
    rigs = [file for file in files if file.lower().endswith(".toml")]
    logs = [file for file in files if file not in rigs]
    if len(rigs) != 1 or not logs:
        raise UsageError(
            f"one or more logs and one rig file (.toml) are needed; got {len(logs)} and {len(rigs)}",
            where="rigtally tally",
            do="write rigtally tally LOG... RIG.toml",
            code="command-line",
        )
    return rigs[0], logs


def _limits_met(rig: Any, prediction: Any, fitted: Any) -> tuple[Any, ...]:
    """Limits of the elements that the first log oversteps (Reynolds number, absolute pressure …)."""
    from rigtally.physics.validity import check_validity

    trace = fitted.traces[0]
    if not math.isfinite(fitted.interval):
        return ()
    found = check_validity(rig, prediction, trace.inputs, fitted.interval, start=float(trace.time[0]))
    return tuple(finding for finding in found if finding.code.endswith("-exceeded"))


def _between(drives: Any) -> str:
    """What the rig file says of the drives between samples; one word for all."""
    words = {drive.between for drive in drives}
    return str(words.pop()) if len(words) == 1 else "ramped"
