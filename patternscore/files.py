"""Reads files that a person names: regular ones, of a sensible size, with one-line messages."""

from __future__ import annotations

import os
import stat
from pathlib import Path

from patternscore.errors import PatternscoreError, UnscorableFrame, UsageError


def shown(name: object) -> str:
    """Name of a file fit for one line of a message: no line breaks, nothing that cannot be printed."""
    return "".join(letter if letter.isprintable() else "?" for letter in str(name))


def read_bytes(
    path: Path | str, largest: int, wanted: str = "picture file", kind: type[PatternscoreError] = UnscorableFrame
) -> bytes:
    """Bytes of a file.

    Parameters
    ----------
    path : Path
    largest : int
        Bytes beyond which the file cannot be what it should be.
    wanted : str
        What the file should be, for messages.
    kind : type
        Error raised when it cannot be read.

    Raises
    ------
    UnscorableFrame (or ``kind``)
        When the file is missing, unreadable, empty, too large or no regular file.
    UsageError
        When it is a folder.
    """
    name = shown(path)
    try:
        status = os.stat(path)  # before opening: a pipe without a writer would be waited for
        if stat.S_ISDIR(status.st_mode):
            raise UsageError(f"{name}: is a folder; name a {wanted} in it")
        if not stat.S_ISREG(status.st_mode):
            raise kind(f"{name}: is no regular file; save it as a {wanted} first")
        with open(path, "rb") as file:
            data = file.read(largest + 1)
    except FileNotFoundError:
        raise kind(f"{name}: no such file; check the name") from None
    except PermissionError:
        raise kind(f"{name}: may not be read; check its permissions") from None
    except OSError as error:
        raise kind(f"{name}: cannot be read ({error.strerror}); check the name and the disk") from None
    except ValueError:  # a zero byte within
        raise kind(f"{name}: is no file name; check it") from None
    if not data:
        raise kind(f"{name}: is empty; make it again")
    if len(data) > largest:
        raise kind(f"{name}: is over {_size(largest)}, too large for a {wanted}; check the name")
    return data


def check_place(path: Path) -> None:
    """Refuse a place to write to before the work is done, where it can be told.

    Raises
    ------
    UsageError
        When the name is a folder's, or its folder is missing or may not be written to.
    """
    name, folder = shown(path), path.parent
    if path.is_dir():
        raise UsageError(f"{name}: is a folder; name a file in it")
    if not folder.is_dir():
        raise UsageError(f"{name}: cannot be written (no such folder); make the folder or name another place")
    if not os.access(path if path.exists() else folder, os.W_OK):
        raise UsageError(f"{name}: may not be written; check its permissions or name another place")


def _size(count: int) -> str:
    return f"{count // 2**20} MiB" if count >= 2**20 else f"{count // 2**10} KiB"
