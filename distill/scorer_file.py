"""What a scorer file may hold, checked on its bytes before anything runs it; floor 1, light."""

from __future__ import annotations

from typing import Final

from distill import schema
from distill.errors import ScorerFileError

__all__ = ["FORMAT", "MAX_BYTES", "check"]

FORMAT: Final = schema.SCORER_FORMAT
MAX_BYTES: Final = 64 * 2**20


def check(data: bytes) -> None:
    """Refuse bytes that are no scorer file, with the reason as ScorerFileError."""
    if len(data) > MAX_BYTES:
        raise ScorerFileError(f"must be at most {MAX_BYTES} bytes; got {len(data)}")
