"""Writing a file so that a reader sees the old one or the new one, never half of it."""

from __future__ import annotations

import os
import tempfile
from pathlib import Path

from lmpgap.errors import DataError, Fault


def write_atomically(path: Path, text: str) -> Path:
    """Write text as UTF-8 to a neighbouring temporary file and rename it into place.

    Raises
    ------
    DataError
        The folder cannot be made or written to.
    """
    temporary: str | None = None
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        handle, temporary = tempfile.mkstemp(prefix=f".{path.stem[:40]}-", suffix=".tmp", dir=path.parent)
        with os.fdopen(handle, "w", encoding="utf-8", newline="\n") as stream:
            stream.write(text)
            stream.flush()
            os.fsync(stream.fileno())
        mask = os.umask(0)
        os.umask(mask)
        os.chmod(temporary, 0o666 & ~mask)
        os.replace(temporary, path)
    except OSError as error:
        if temporary is not None and os.path.exists(temporary):
            os.unlink(temporary)
        fault = Fault(
            table=str(path),
            message=f"cannot be written: {error.strerror or error}",
            allowed="a folder with space and permission to write",
        )
        raise DataError("The report was not written.", [fault]) from error
    return path
