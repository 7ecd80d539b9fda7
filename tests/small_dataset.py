"""A small labelled dataset of the default Gaussian family, for tests of training and validation."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from distill.family import load_family
from distill.generate import Asked, generate

FAMILY = Path(__file__).parents[1] / "datasets" / "families" / "cold-store.toml"


def labelled(folder: Path, trees: int = 300, seed: int = 5, **asked: Any) -> Path:
    """`trees` trees labelled with the dynamic rate, or as `asked`; returns the folder."""
    generate(load_family(FAMILY), folder, trees=trees, seed=seed, asked=Asked(**asked))
    return folder
