"""Writing files so that a reader never sees half of one."""

from __future__ import annotations

import contextlib
import os
import tempfile
from collections.abc import Mapping
from pathlib import Path

from withstand.errors import InputError

PAGE = "report.html"
"""Name of the page in the folder of a run."""


def write_files(folder: Path, contents: Mapping[str, bytes]) -> None:
    """Write files below a folder: all of them beside their places first, then each moved into place.

    Parameters
    ----------
    folder : Path
        Made where it is missing.
    contents : mapping of str to bytes
        By path below the folder.

    Raises
    ------
    InputError
        If the folder cannot be made or written to, or the disk is full. Files that were there are then left as they were.
    """
    waiting: dict[Path, str] = {}
    try:
        for name, content in contents.items():
            target = folder / name
            target.parent.mkdir(parents=True, exist_ok=True)
            waiting[target] = _write_beside(target, content)
        for target in list(waiting):
            os.replace(waiting[target], target)
            del waiting[target]
    except OSError as error:
        raise InputError(
            f"the results cannot be written: {error.strerror or error}",
            where=str(folder),
            remedy="Make room or give write permission there, or name another folder; nothing that was stored is lost.",
        ) from error
    finally:
        for rest in waiting.values():
            with contextlib.suppress(OSError):
                os.unlink(rest)


def _write_beside(target: Path, content: bytes) -> str:
    handle, name = tempfile.mkstemp(dir=target.parent, prefix=f".{target.name}.")
    try:
        with os.fdopen(handle, "wb") as file:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        os.chmod(name, 0o666 & ~_umask())
    except OSError:
        os.unlink(name)
        raise
    return name


def _umask() -> int:
    """The permissions a new file does not get; a temporary file would be private otherwise."""
    mask = os.umask(0)
    os.umask(mask)
    return mask
