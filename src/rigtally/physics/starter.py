"""Rig files to begin from."""

from __future__ import annotations

import difflib
from importlib import resources

from rigtally.errors import UsageError


def starter_kinds() -> tuple[str, ...]:
    """Kinds of rig for which there is a file, in order of their names."""
    folder = resources.files("rigtally.physics").joinpath("starters")
    return tuple(
        sorted(entry.name.removesuffix(".toml") for entry in folder.iterdir() if entry.name.endswith(".toml"))
    )


def starter(kind: str) -> str:
    """The commented rig file of a kind.

    Raises
    ------
    UsageError
        code "unknown-starter", with the kinds there are.
    """
    kinds = starter_kinds()
    if kind not in kinds:
        near = difflib.get_close_matches(kind, kinds, n=1)
        hint = f"did you mean {near[0]!r}? " if near else ""
        raise UsageError(
            f"there is no starter {kind!r}",
            do=f"{hint}choose one of: {', '.join(kinds)}",
            code="unknown-starter",
        )
    return resources.files("rigtally.physics").joinpath(f"starters/{kind}.toml").read_text(encoding="utf-8")
