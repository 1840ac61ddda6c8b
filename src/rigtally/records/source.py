"""The bytes of a text log: unpacked, hashed, decoded to UTF-8 with plain line ends, or refused."""

from __future__ import annotations

import codecs
import hashlib
import mmap
import os
import zlib
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from rigtally.errors import LogError

# A packed log that grows beyond both limits, or beyond the last, is refused (bytes; unpacked over packed).
GROWTH_FREE = 64_000_000
GROWTH_RATIO = 150
UNPACKED_LIMIT = 600_000_000
# Logs of thousands of channels have long lines; a longer one is no table of numbers.
LINE_LIMIT = 200_000
_BLOCK = 1 << 20

_BOMS = (
    (codecs.BOM_UTF8, "utf-8"),
    (codecs.BOM_UTF32_LE, "utf-32"),
    (codecs.BOM_UTF32_BE, "utf-32"),
    (codecs.BOM_UTF16_LE, "utf-16"),
    (codecs.BOM_UTF16_BE, "utf-16"),
)
_OTHER_FILES = (
    (b"PK\x03\x04", "a zip or spreadsheet file", "save the sheet as CSV"),
    (b"\xd0\xcf\x11\xe0", "an old spreadsheet file", "save the sheet as CSV"),
    (b"\x89PNG", "a picture", "name the log"),
    (b"%PDF", "a PDF document", "name the log"),
    (b"BZh", "packed with bzip2", "unpack it first"),
    (b"\xfd7zXZ", "packed with xz", "unpack it first"),
)
_MINUS = "\u2212".encode()


@dataclass(frozen=True)
class Source:
    """A text log in memory.

    Attributes
    ----------
    name : str
        The file as the caller wrote it.
    disk : memoryview
        The file as it lies on the disk.
    text : memoryview
        UTF-8 without a byte order mark; lines end in \\n or \\r\\n.
    encoding : str
        What the file was decoded from.
    packed : bool
        Whether it came out of gzip.
    on_disk : bool
        The text is the file, byte by byte.
    """

    name: str
    disk: memoryview
    text: memoryview
    encoding: str
    packed: bool = False
    on_disk: bool = False

    def sha256(self) -> str:
        """Of the file as it lies on the disk."""
        return hashlib.sha256(self.disk).hexdigest()


def open_bytes(name: str) -> memoryview:
    """The file's bytes, mapped, not copied.

    Raises
    ------
    LogError
        codes "no-such-file", "unreadable", "empty".
    """
    path = Path(name)
    try:
        if path.is_dir():
            raise LogError("this is a folder", where=name, do="name the log file in it", code="unreadable")
        if not path.is_file():
            if path.exists():
                raise LogError("this is no ordinary file", where=name, do="name a log", code="unreadable")
            raise LogError(
                "there is no such file", where=name, do="check the name and the folder", code="no-such-file"
            )
        with path.open("rb") as stream:
            if os.fstat(stream.fileno()).st_size == 0:
                raise LogError("the file is empty", where=name, do="name another log", code="empty")
            return memoryview(mmap.mmap(stream.fileno(), 0, access=mmap.ACCESS_READ))
    except (OSError, ValueError) as fault:
        reason = getattr(fault, "strerror", None) or str(fault)
        raise LogError(
            f"the file cannot be read: {reason}",
            where=name,
            do="check the name and the rights",
            code="unreadable",
        ) from None


def open_text(name: str, encoding: str | None = None) -> Source:
    """Read a text log, packed or not, in whatever encoding.

    Without `encoding`: a byte order mark, else the zeros of UTF-16, else UTF-8 if every byte fits, else
    CP1252.

    Raises
    ------
    LogError
        codes "no-such-file", "unreadable", "empty", "truncated", "too-large", "binary", "encoding".
    """
    disk = raw = open_bytes(name)
    packed = bytes(raw[:2]) == b"\x1f\x8b"
    if packed:
        raw = memoryview(_unpacked(raw, name))
        if len(raw) == 0:
            raise LogError("the packed file is empty", where=name, do="name another log", code="empty")
    for magic, what, do in _OTHER_FILES:
        if bytes(raw[: len(magic)]) == magic:
            raise LogError(f"this is {what}, no text log", where=name, do=do, code="binary")
    text, found = _decoded(raw, name, encoding)
    plain = _plain_line_ends(text)
    same = plain.obj is raw.obj and len(plain) == len(raw)
    return Source(name, disk, plain, found, packed, same and not packed)


def _unpacked(raw: memoryview, name: str) -> bytes:
    """gzip, member by member, with a limit on what may come out."""
    out: list[bytes] = []
    size = 0
    rest = bytes(raw)
    limit = min(UNPACKED_LIMIT, max(GROWTH_FREE, GROWTH_RATIO * len(raw)))
    try:
        while rest.startswith(b"\x1f\x8b"):
            member = zlib.decompressobj(wbits=31)
            while not member.eof:
                piece = member.decompress(rest, _BLOCK)
                rest = member.unconsumed_tail
                size += len(piece)
                out.append(piece)
                if size > limit:
                    raise LogError(
                        f"{len(raw)} packed bytes unpack to more than {limit} bytes",
                        where=name,
                        do="unpack it yourself if it is a log",
                        code="too-large",
                    )
                if not piece and not rest and not member.eof:
                    raise LogError(
                        "the packed file ends before its end",
                        where=name,
                        do="copy it again from the logger",
                        code="truncated",
                    )
            rest = member.unused_data
    except zlib.error:
        raise LogError(
            "the packed file is damaged", where=name, do="copy it again from the logger", code="truncated"
        ) from None
    return b"".join(out)


def _decoded(raw: memoryview, name: str, encoding: str | None) -> tuple[memoryview, str]:
    """The text as UTF-8, and the encoding it came in."""
    for mark, found in _BOMS:
        if bytes(raw[: len(mark)]) == mark:
            if encoding is None or codecs.lookup(encoding).name.startswith(found):
                if found == "utf-8":
                    return _checked(raw[len(mark) :], name), "UTF-8 with byte order mark"
                return _from(raw, found, name), found.upper()
            break
    if encoding is not None:
        try:
            canonical = codecs.lookup(encoding).name
        except LookupError:
            raise LogError(
                f"encoding {encoding!r} is not known",
                where=name,
                do="name one such as utf-8, utf-16, cp1252",
                code="encoding",
            ) from None
        return _from(raw, canonical, name), canonical.upper()
    head = np.frombuffer(raw[: min(len(raw), 4096) // 2 * 2], dtype=np.uint8)
    if head.size >= 4:
        zeros = (head[0::2] == 0).mean(), (head[1::2] == 0).mean()
        if zeros[1] > 0.6 and zeros[0] < 0.05:
            return _from(raw, "utf-16-le", name), "UTF-16 (little-endian)"
        if zeros[0] > 0.6 and zeros[1] < 0.05:
            return _from(raw, "utf-16-be", name), "UTF-16 (big-endian)"
    if int(np.frombuffer(raw, dtype=np.uint8).max()) < 0x80:
        return _checked(raw, name), "ASCII"
    try:
        codecs.decode(raw, "utf-8")
    except UnicodeDecodeError:
        # a few damaged bytes among signs of two and more bytes leave the text what it is
        text = codecs.decode(raw, "utf-8", "replace")
        damaged = text.count("\ufffd")
        if damaged <= sum(sign > "\x7f" for sign in text) - damaged:
            return _checked(memoryview(text.encode()), name), f"UTF-8 ({damaged} damaged signs)"
        return _from(raw, "cp1252", name), "CP1252"
    return _checked(raw, name), "UTF-8"


def _from(raw: memoryview, encoding: str, name: str) -> memoryview:
    try:
        text = codecs.decode(raw, encoding)
    except (UnicodeError, ValueError, zlib.error) as fault:
        at = getattr(fault, "start", None)
        place = "" if at is None else f" at byte {at}"
        raise LogError(
            f"the file is no text in {encoding}{place}",
            where=name,
            do="state the encoding, as --encoding cp1252",
            code="encoding",
        ) from None
    except LookupError:
        raise LogError(
            f"{encoding!r} is no encoding of text", where=name, do="name one such as utf-8", code="encoding"
        ) from None
    if not isinstance(text, str):
        raise LogError(
            f"{encoding!r} is no encoding of text", where=name, do="name one such as utf-8", code="encoding"
        )
    return _checked(memoryview(text.lstrip("\ufeff").encode("utf-8", "replace")), name)


def _checked(text: memoryview, name: str) -> memoryview:
    """Refuse what no text holds; signs of minus other than ASCII's are made plain."""
    signs = np.frombuffer(text, dtype=np.uint8)
    while signs.size and signs[-1] in (0, 0x1A):
        signs = signs[:-1]
    text = text[: signs.size]
    if bytes(text[:_BLOCK]).strip() == b"" and bytes(text).strip() == b"":
        raise LogError("the file holds no text", where=name, do="name another log", code="empty")
    head = signs[: 4 * _BLOCK]
    controls = np.count_nonzero((head < 9) | ((head > 13) & (head < 32)))
    if int(signs.min()) == 0 or controls > 0.01 * head.size:
        raise LogError(
            "this is no text log: it holds bytes that no text has",
            where=name,
            do="name a CSV or HDF5 file",
            code="binary",
        )
    if int(signs.max()) >= 0x80:
        plain = bytes(text)
        if _MINUS in plain:
            return memoryview(plain.replace(_MINUS, b"-"))
    return text


def _plain_line_ends(text: memoryview) -> memoryview:
    """A lone carriage return ends a line, too."""
    signs = np.frombuffer(text, dtype=np.uint8)
    returns = np.flatnonzero(signs == 13)
    if returns.size == 0:
        return text
    followed = returns[:-1] if returns[-1] == signs.size - 1 else returns
    if followed.size == returns.size and bool(np.all(signs[followed + 1] == 10)):
        return text
    return memoryview(bytes(text).replace(b"\r\n", b"\n").replace(b"\r", b"\n"))
