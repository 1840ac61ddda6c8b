"""Writing a file at once or not at all."""

from __future__ import annotations

import os
import tempfile
from pathlib import Path

from rigtally.errors import UsageError


def write_whole(path: str | Path, content: str | bytes) -> Path:
    """Write `content` to a temporary neighbour, then put it in the file's place.

    Raises
    ------
    UsageError
        code "cannot-write": the folder does not exist or may not be written to.
    """
    target = Path(path)
    data = content.encode("utf-8") if isinstance(content, str) else content
    temporary = ""
    try:
        handle, temporary = tempfile.mkstemp(dir=target.parent, prefix=f".{target.name}.")
        with os.fdopen(handle, "wb") as stream:
            stream.write(data)
        umask = os.umask(0)
        os.umask(umask)
        os.chmod(temporary, 0o666 & ~umask)
        os.replace(temporary, target)
    except OSError as fault:
        if temporary and os.path.exists(temporary):
            os.unlink(temporary)
        raise UsageError(
            f"cannot write the file: {fault.strerror or fault}",
            where=str(path),
            do="name a file in a folder that exists and may be written to",
            code="cannot-write",
        ) from None
    return target
