"""The text of a rig file with its lines, and the one way in which its faults are told."""

from __future__ import annotations

import difflib
import hashlib
import re
import tomllib
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

from rigtally.errors import RigError, UsageError
from rigtally.physics.rig_lines import Lines, find_lines
from rigtally.quantities.tolerance import read_quantity
from rigtally.quantities.uncertain import Uncertain

LARGEST = 2_000_000  # bytes: a rig file is written by hand


class Source:
    """A parsed rig file.

    Attributes
    ----------
    file, text, sha256 : str
    tree : dict, as TOML has it
    lines : Lines
    """

    def __init__(self, path: str | Path) -> None:
        self.file = str(path)
        try:
            data = Path(path).read_bytes()
        except OSError as fault:
            raise RigError(
                f"the rig file cannot be read: {fault.strerror or fault}",
                where=self.file,
                do="name a rig file; `rigtally starter` lists kinds to begin from",
                code="cannot-read",
            ) from None
        if len(data) > LARGEST:
            raise RigError(
                f"the file has {len(data)} bytes, too many for a rig file",
                where=self.file,
                do="name a rig file (TOML, written by hand)",
                code="not-a-rig-file",
            )
        self.sha256 = hashlib.sha256(data).hexdigest()
        try:
            self.text = data.decode("utf-8-sig")
            self.tree: dict[str, Any] = tomllib.loads(self.text)
            self.lines: Lines = find_lines(self.text)
        except UnicodeDecodeError as fault:
            line = data[: fault.start].count(b"\n") + 1
            raise RigError(
                "the file is not UTF-8 text",
                where=f"{self.file}:{line}",
                do="save it as UTF-8",
                code="not-text",
            ) from None
        except tomllib.TOMLDecodeError as fault:
            raise self._syntax(str(fault)) from None
        except (RecursionError, ValueError) as fault:
            raise RigError(
                "the file cannot be read as TOML: "
                + (
                    "nested too deep" if isinstance(fault, RecursionError) else "a number has too many digits"
                ),
                where=self.file,
                do="write it as `rigtally starter` shows",
                code="not-toml",
            ) from None

    def _syntax(self, message: str) -> RigError:
        found = re.search(r"\(at line (\d+)", message)
        line = found.group(1) if found else str(self.text.count("\n") + 1)
        what = re.sub(r"\s*\(at .*\)$", "", message)
        return RigError(
            f"this is not TOML: {what}",
            where=f"{self.file}:{line}",
            do='write key = "value" with quotes, one a line',
            code="not-toml",
        )

    def fault(
        self,
        what: str,
        *,
        table: str,
        number: int = 0,
        name: str = "",
        key: str = "",
        do: str = "",
        code: str,
    ) -> RigError:
        """A refusal with file, line and table."""
        line = self.lines.key(table, number, key) if key else self.lines.table(table, number)
        shown = f'[[{table}]] "{name}"' if name or self._is_list(table) else f"[{table}]"
        if self._is_list(table) and not name:
            shown = f"[[{table}]] number {number + 1}"
        return RigError(what, where=f"{self.file}:{line}: {shown}", do=do, code=code)

    def whole(self, what: str, *, do: str, code: str) -> RigError:
        """A refusal of the file as a whole."""
        return RigError(what, where=self.file, do=do, code=code)

    def _is_list(self, table: str) -> bool:
        return isinstance(self.tree.get(table), list)

    def quantity(
        self,
        value: Any,
        unit: str,
        *,
        table: str,
        number: int = 0,
        name: str = "",
        key: str,
        positive: bool = True,
    ) -> Uncertain:
        """A written value in SI, its faults told with their line."""
        try:
            return read_quantity(value, unit, positive=positive, key=key)
        except UsageError as fault:
            raise self.fault(
                fault.what, table=table, number=number, name=name, key=key, do=fault.do, code=fault.code
            ) from None

    def only_keys(
        self, entry: Mapping[str, Any], allowed: Iterable[str], *, table: str, number: int = 0, name: str = ""
    ) -> None:
        """Refuse a key that the table does not know, with the nearest that it does."""
        known = list(allowed)
        for key in entry:
            if key not in known:
                raise self.fault(
                    f"key {key!r} is not known here",
                    table=table,
                    number=number,
                    name=name,
                    key=key,
                    do=nearest(key, known),
                    code="unknown-key",
                )

    def text_of(
        self,
        entry: Mapping[str, Any],
        key: str,
        *,
        table: str,
        number: int = 0,
        name: str = "",
        need: bool = True,
    ) -> str:
        """A word of a table."""
        value = entry.get(key)
        if isinstance(value, str) and value.strip():
            return value.strip()
        if value is None and not need:
            return ""
        what = f"{key} is missing" if value is None else f"{key} = {value!r} is not a name"
        raise self.fault(
            what, table=table, number=number, name=name, key=key, do=f'write {key} = "…"', code="missing-key"
        )

    def one_of(
        self,
        word: str,
        words: Iterable[str],
        *,
        table: str,
        number: int = 0,
        name: str = "",
        key: str,
        code: str,
    ) -> str:
        """A word out of a list."""
        known = list(words)
        if word not in known:
            raise self.fault(
                f"{key} = {word!r} is not known",
                table=table,
                number=number,
                name=name,
                key=key,
                do=nearest(word, known),
                code=code,
            )
        return word


def nearest(word: str, known: list[str]) -> str:
    """What to do about an unknown word."""
    close = difflib.get_close_matches(word, known, n=1, cutoff=0.6)
    return f"did you mean {close[0]!r}?" if close else "choose one of: " + ", ".join(known)
