"""A small labelled dataset of the default Gaussian family, for tests of training and validation."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from distill.candidates import Candidates
from distill.family import load_family
from distill.generate import Asked, generate
from distill.metrics import picks
from distill.runtime import Scorer

FAMILY = Path(__file__).parents[1] / "datasets" / "families" / "cold-store.toml"


def labelled(folder: Path, trees: int = 300, seed: int = 5, **asked: Any) -> Path:
    """`trees` trees labelled with the dynamic rate, or as `asked`; returns the folder."""
    generate(load_family(FAMILY), folder, trees=trees, seed=seed, asked=Asked(**asked))
    return folder


def forgone(path: Path, dataset: Path) -> tuple[np.ndarray, np.ndarray]:
    """What the picks of a scorer file lose at each tree, and the best there is, in the unit of its value."""
    scorer = Scorer.load(path)
    rows, _ = Candidates.read(dataset, like=scorer.kind)
    best = rows.groups.highest(rows.label)
    score = scorer.score(**rows.columns, tree=rows.tree).voc
    return best - rows.label[picks(rows.groups, score)], best
