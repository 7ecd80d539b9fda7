"""Atomic writing and hashing; floor 0, light."""

from __future__ import annotations

import contextlib
import errno
import hashlib
import json
import os
import re
import secrets
import stat
from pathlib import Path
from typing import Any, Final

from distill.errors import InputError

__all__ = ["is_stream", "read_json", "sha256_of", "write_atomic"]

_STANDARD: Final = re.compile(r"/dev/(?:stdout|stderr|fd/(\d+))")
_LONGEST: Final = 50  # characters of a name that the temporary one repeats; a file system takes 255 bytes


def write_atomic(path: str | os.PathLike[str], data: bytes) -> None:
    """Write a file so that a reader sees the old bytes or the new ones, never a part.

    The data go to a temporary file in the same folder, are flushed to disk, and take the name in one
    step. The mode is that of the file replaced, or what the umask gives a new one. A symbolic link stays,
    and the file that it points to is replaced. A pipe or a character device is written through.
    OSError passes through and names the path, also where that is a folder, a socket or a disk; the temporary
    file is removed.
    """
    try:
        old = _status(path)
        if is_stream(path):
            _write_through(path, data)
        elif old is None or stat.S_ISREG(old.st_mode):
            _replace(Path(os.path.realpath(path)), data, None if old is None else stat.S_IMODE(old.st_mode))
        else:
            raise OSError(errno.EINVAL, "is no regular file")
    except OSError as e:
        e.filename = str(path)  # not the temporary one; a full disk names none at all
        raise


def is_stream(path: str | os.PathLike[str]) -> bool:
    """Whether the path is written through: a pipe, a character device, or an open file of this process."""
    old = _status(path)
    return old is not None and (
        stat.S_ISCHR(old.st_mode) or stat.S_ISFIFO(old.st_mode) or _STANDARD.fullmatch(str(path)) is not None
    )


def _status(path: str | os.PathLike[str]) -> os.stat_result | None:
    try:
        return os.stat(path)  # noqa: PTH116
    except (FileNotFoundError, NotADirectoryError):
        return None


def _write_through(path: str | os.PathLike[str], data: bytes) -> None:
    name = _STANDARD.fullmatch(str(path))
    if name is None:
        fd = os.open(path, os.O_WRONLY)
    else:  # opened anew, a file that standard output goes to would be written from its start
        fd = os.dup(int(name[1]) if name[1] else 2 if str(path).endswith("err") else 1)
    with os.fdopen(fd, "wb") as f:
        f.write(data)


def _replace(path: Path, data: bytes, mode: int | None) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    temporary = path.parent / f".{path.name[:_LONGEST]}.{secrets.token_hex(8)}.part"
    try:
        # With mkstemp the file would be its owner's alone, whatever the umask says.
        fd = os.open(temporary, os.O_WRONLY | os.O_CREAT | os.O_EXCL | getattr(os, "O_CLOEXEC", 0), 0o666)
        with os.fdopen(fd, "wb") as f:
            f.write(data)
            f.flush()
            os.fsync(f.fileno())
        if mode is not None:
            temporary.chmod(mode)
        temporary.replace(path)
    except BaseException:
        with contextlib.suppress(OSError):
            temporary.unlink(missing_ok=True)
        raise


def sha256_of(path: str | os.PathLike[str]) -> str:
    """SHA-256 of a file's bytes, as hexadecimal text."""
    with Path(path).open("rb") as f:
        return hashlib.file_digest(f, "sha256").hexdigest()


def read_json(path: str | os.PathLike[str]) -> Any:
    """What a JSON file of our own holds; InputError where it is no valid JSON. OSError passes through."""
    try:
        return json.loads(Path(path).read_bytes())
    except (ValueError, RecursionError) as e:  # the latter where brackets nest without end
        raise InputError(str(path), f"must be valid JSON ({e})") from None
