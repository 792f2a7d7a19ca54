"""A file that is either the old one or the new one, never a part of either; host-side."""

import os
import secrets
from collections.abc import Callable
from pathlib import Path
from typing import Any, BinaryIO


def write_atomically(path: Path, write: Callable[[BinaryIO], Any]) -> None:
    """Let `write` fill a file beside `path`, bring it to the disk, and move it into place."""
    _remove_leftovers(path)
    beside = path.with_name(f".{path.name}.{secrets.token_hex(8)}.tmp")
    try:
        with beside.open("xb") as file:
            write(file)
            file.flush()
            os.fsync(file.fileno())
        os.replace(beside, path)
    except BaseException:
        beside.unlink(missing_ok=True)
        raise
    if os.name == "posix":
        # The new name too must survive a loss of power.
        folder = os.open(path.parent, os.O_RDONLY)
        try:
            os.fsync(folder)
        finally:
            os.close(folder)


def _remove_leftovers(path: Path) -> None:
    """Remove what processes that were killed while writing this file have left behind."""
    for other in path.parent.iterdir():
        if other.name.startswith(f".{path.name}.") and other.name.endswith(".tmp"):
            other.unlink(missing_ok=True)
