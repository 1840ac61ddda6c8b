"""The command line: it reads, calls one function, and prints."""

from __future__ import annotations

import importlib
import json
import os
import sys
import warnings
from collections.abc import Sequence
from typing import Any

import click

from rigtally import __version__
from rigtally.errors import RigtallyError

# command: module that holds it; a module is imported when its command is asked for
COMMANDS = ("inspect", "fit", "predict", "tally", "starter")


class _Commands(click.Group):
    """Loads each command's module only when it is needed."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in COMMANDS:
            return None
        module = importlib.import_module(f"rigtally.cli.commands.{cmd_name}")
        command: click.Command = module.command
        return command


@click.group(cls=_Commands, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="rigtally")
def group() -> None:
    """Do the bench and the lumped model tally?

    Reads a test's log, fits a low-order transfer function to it, predicts the
    same from the rig file, and sets natural frequency, damping ratio and gain
    side by side.
    """


def main(arguments: Sequence[str] | None = None) -> None:
    """Run a command and leave with the contract's exit code."""
    given = list(sys.argv[1:] if arguments is None else arguments)
    sys.exit(run(given))


def run(arguments: Sequence[str]) -> int:
    """Run a command; refusals become one line and an exit code, never a traceback."""
    if not sys.warnoptions:
        warnings.simplefilter("ignore")
    as_json = "--json" in arguments
    try:
        outcome = group.main(args=list(arguments), prog_name="rigtally", standalone_mode=False)
        return outcome if isinstance(outcome, int) else 0
    except RigtallyError as refusal:
        return _refuse(refusal.to_dict(), refusal.line(), refusal.exit_code, as_json)
    except click.exceptions.Exit as leave:
        return leave.exit_code
    except click.ClickException as fault:
        what = " ".join(fault.format_message().split())
        where = ""
        context = getattr(fault, "ctx", None)
        if context is not None:
            where = context.command_path
        refusal_parts = {
            "schema": "rigtally/refusal/1",
            "code": "command-line",
            "what": what,
            "where": where,
            "do": f"see `{where or 'rigtally'} --help`",
        }
        line = f"{where}: {what}" if where else what
        return _refuse(refusal_parts, f"{line}; {refusal_parts['do']}", 2, as_json)
    except (KeyboardInterrupt, click.exceptions.Abort):
        click.echo("stopped: nothing was written", err=True)
        return 130
    except BrokenPipeError:
        sys.stderr.close()
        return 0
    except Exception as fault:
        if os.environ.get("RIGTALLY_TRACEBACK"):
            raise
        what = f"a fault of the program itself ({type(fault).__name__}: {' '.join(str(fault).split())[:200]})"
        do = "set RIGTALLY_TRACEBACK=1, run it again, and report what it prints together with the log"
        parts = {"schema": "rigtally/refusal/1", "code": "internal", "what": what, "where": "", "do": do}
        return _refuse(parts, f"{what}; {do}", 4, as_json)


def _refuse(parts: dict[str, Any], line: str, code: int, as_json: bool) -> int:
    click.echo(f"rigtally: {line}", err=True)
    if as_json:
        click.echo(json.dumps(parts, ensure_ascii=False))
    return code
