"""Atomic writing and hashing; floor 0, light."""

from __future__ import annotations

import hashlib
import json
import os
import tempfile
from pathlib import Path
from typing import Any

from distill.errors import InputError

__all__ = ["read_json", "sha256_of", "write_atomic"]


def write_atomic(path: str | os.PathLike[str], data: bytes) -> None:
    """Write a file so that a reader sees the old bytes or the new ones, never a part.

    The data go to a temporary file in the same folder, are flushed to disk, and take the name in one
    step. OSError passes through and names the path; the temporary file is removed.
    """
    path = Path(path)
    temporary = None
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        fd, temporary = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.", suffix=".part")
        with os.fdopen(fd, "wb") as f:
            f.write(data)
            f.flush()
            os.fsync(f.fileno())
        Path(temporary).chmod(0o644)
        Path(temporary).replace(path)
    except BaseException as e:
        if temporary is not None:
            Path(temporary).unlink(missing_ok=True)
        if isinstance(e, OSError):
            e.filename = str(path)  # not the temporary one; a full disk names none at all
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
