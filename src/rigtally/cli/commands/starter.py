"""rigtally starter KIND"""

from __future__ import annotations

import json

import click

from rigtally.files import write_whole


@click.command("starter")
@click.argument("kind", required=False, metavar="KIND")
@click.option("--save", "save_file", type=click.Path(dir_okay=False), help="Write the rig file there.")
@click.option("--json", "as_json", is_flag=True, help="One JSON document on standard output.")
def command(kind: str | None, save_file: str | None, as_json: bool) -> None:
    """Write a commented rig file to begin from; without KIND, list the kinds."""
    from rigtally.physics.starter import starter, starter_kinds

    if kind is None:
        kinds = list(starter_kinds())
        if as_json:
            click.echo(json.dumps({"schema": "rigtally/starters/1", "kinds": kinds}))
        else:
            click.echo("\n".join(kinds))
        return
    text = starter(kind)
    if save_file:
        write_whole(save_file, text)
    if as_json:
        click.echo(
            json.dumps({"schema": "rigtally/starter/1", "kind": kind, "text": text}, ensure_ascii=False)
        )
    elif not save_file:
        click.echo(text, nl=False)
