"""One family of exceptions. Each says what is wrong, where, and what to do.

The command line prints `line()` to standard error and ends with `exit_code`;
with `--json` it prints `to_dict()` as well.
"""

from __future__ import annotations


class RigtallyError(Exception):
    """A refusal: what, where, and what to do, in one line.

    Parameters
    ----------
    what : str
        What is wrong, in the user's words, with the value that was found.
    where : str
        File, line, column, table or channel.
    do : str
        What to change.
    code : str
        A short stable name of the fault, for programs.
    """

    exit_code = 2

    def __init__(self, what: str, *, where: str = "", do: str = "", code: str = "refused") -> None:
        super().__init__(what)
        self.what = what
        self.where = where
        self.do = do
        self.code = code

    def line(self) -> str:
        """The refusal on one line."""
        parts = [f"{self.where}: {self.what}" if self.where else self.what]
        if self.do:
            parts.append(self.do)
        return " ".join("; ".join(parts).split())

    def __str__(self) -> str:
        return self.line()

    def to_dict(self) -> dict[str, str]:
        """The refusal as the JSON contract states it."""
        return {
            "schema": "rigtally/refusal/1",
            "code": self.code,
            "what": self.what,
            "where": self.where,
            "do": self.do,
        }


class UsageError(RigtallyError):
    """The command line, or a call, is wrong (exit code 2)."""

    exit_code = 2


class RigError(RigtallyError):
    """The rig file is wrong (exit code 2)."""

    exit_code = 2


class LogError(RigtallyError):
    """The log cannot be used (exit code 3)."""

    exit_code = 3


class FitError(RigtallyError):
    """The log can be read, but no fit of it could be trusted (exit code 4)."""

    exit_code = 4
