"""Files of a campaign's folder by what they are about: a problem under a budget, or a problem alone."""

from __future__ import annotations

import hashlib
import json
from pathlib import Path

__all__ = ["place_file", "played_by", "slug"]


def place_file(folder: Path, problem: str, budget: str) -> Path:
    """The file of a problem under a budget: who plays there. Beside it, `.done` once all have."""
    return folder / "places" / f"{slug(problem, budget)}.json"


def slug(*texts: str) -> str:
    """A file's name: what is readable of some texts, and a hash of all of them."""
    key = hashlib.sha256(json.dumps(texts).encode()).hexdigest()[:12]
    readable = "".join(c if c.isalnum() else "-" for c in "--".join(texts))
    return f"{readable[:80]}--{key}"


def played_by(specs: tuple[str, ...], seeds: int) -> bytes:
    """What `.done` holds: an earlier run may have been asked for fewer policies, or decisions."""
    return (json.dumps({"policies": sorted(specs), "seeds": seeds}) + "\n").encode()
