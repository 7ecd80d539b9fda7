"""What pages and tables name is explained on them."""

from __future__ import annotations

import pytest

from distill.drift import _FEATURES
from distill.feature_graph import FeatureGraph
from distill.report.words import AUDIT_WORDS, INFER_WORDS, LOOK_WORDS, WORDS
from distill.scorer_inputs import ANY_BATCH, ANY_HORIZON, KINDS, VARIES
from distill.slices import tree_facts  # what trees are sliced by


def test_every_feature_of_every_input_is_explained() -> None:
    names = {
        name
        for kind in KINDS.values()
        for horizon in ((VARIES,) if kind is ANY_HORIZON else ("inf", 0.0))
        for name in FeatureGraph.of_value(
            {"horizon": horizon, "batch": VARIES if kind is ANY_BATCH else None}, kind
        ).names
    }
    assert len(names) > 15
    assert set(_FEATURES) == names


@pytest.mark.parametrize("word", ["leaves", "rollouts left", "noise", "gap", "depth", "visits"])
def test_every_slice_is_explained(word: str) -> None:
    assert word in (tree_facts.__doc__ or "")
    assert word in WORDS["slices of trees"]


@pytest.mark.parametrize("words", [LOOK_WORDS, INFER_WORDS, AUDIT_WORDS])
def test_glossaries_are_short_and_whole(words: dict[str, str]) -> None:
    assert 10 < len(words) < 20
    for term, text in words.items():
        assert text.endswith("."), term
        assert len(text) < 400, term
