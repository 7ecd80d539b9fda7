"""The sheet: what is measured stands on the page, figure by figure."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest

from distill.sheet import SHEET_FORMAT, bound_text, sheet_page, write_sheet


def estimate(value: float) -> dict[str, float]:
    return {"value": value, "low": value / 2, "high": 2 * value}


def accuracy(x: float) -> dict[str, Any]:
    return {
        "forgone_percent": estimate(x),
        "relative_forgone_percent": estimate(3 * x),
        "top1_percent": estimate(90 + x),
        "rank_correlation": estimate(0.25),
        "stop_loss_percent": estimate(0.5),
        "stop_loss": [],
        "trees": 150,
        "candidates": 3900,
        "trees_with_best_zero": 7,
        "interval_level": 0.95,
        "in_range_percent": 99.5,
    }


def sheet() -> dict[str, Any]:
    latency = {"p50_us": 21.5, "p99_us": 33.25, "calls": 2000}
    entry = {
        "recipe": "dense 32-32",
        "held_out": accuracy(0.125),
        "choose": accuracy(0.5),
        "latency": latency,
        "bytes": 51200,
        "fit_seconds": 4.5,
        "on_front": True,
    }
    return {
        "format": SHEET_FORMAT,
        "file": {"name": "shuttle.onnx", "sha256": "ab" * 32, "bytes": 51200},
        "recipe": "dense 32-32",
        "chosen": "most accurate within 40 us",
        "value": {"horizon": "inf", "batch": None},
        "data": {
            "source": "cold-store",
            "parts": {
                "fit": {"trees": 750, "candidates": 19000},
                "choose": {"trees": 100, "candidates": 2500},
                "held_out": {"trees": 150, "candidates": 3900},
            },
        },
        "seed": 6,
        "accuracy": entry["held_out"],
        "beside": {
            "static closed form": accuracy(22.0),
            "random pick": {"forgone_percent": {"value": 88.0}, "relative_forgone_percent": {"value": 89.0}},
        },
        "decision": {
            "leaves": 64,
            "scorer": latency,
            "exact": {"dynamic rate": {"p50_us": 8600.0, "p99_us": 9100.0, "calls": 20}},
            "times_faster": {"dynamic rate": 400.0},
        },
        "front": [entry, {**entry, "recipe": "linear", "on_front": False}],
        "features": ["threshold", "lead"],
        "made_with": {"voc-distill": "0.1.0", "machine": "x86_64, 2 cores"},
    }


@pytest.mark.parametrize(
    "text",
    [
        "# shuttle.onnx",
        "dynamic rate: the best VOC a rollout",
        "dense 32-32 (most accurate within 40 us)",
        "no safety function",
        "150 held-out trees (3,900 candidates)",
        "| **this scorer** | 0.125 [0.0625, 0.25] | 0.375 [0.188, 0.75] |",
        "| static closed form | 22 [11, 44] |",
        "| random pick | 88 | 89 |  |  |  |",
        "0.25 [0.125, 0.5] | 0.5 [0.25, 1] |",
        "left out of both shares: 7",
        "over 64 leaves, one thread",
        "| this scorer | 21.5 | 33.2 | 1 |",
        "| exact dynamic rate | 8,600.0 | 9,100.0 | 400 |",
        "| dense 32-32 | yes | 0.125 [0.0625, 0.25] |",
        "| linear | no |",
        "fit: 750 trees, 19,000 candidates",
        "seed 6",
        "SHA-256 of the file: `abab",
    ],
)
def test_the_page_states(text: str) -> None:
    assert text in sheet_page(sheet())


@pytest.mark.parametrize(
    ("value", "text"),
    [
        ({"horizon": "inf", "batch": 1}, "Scores the dynamic VOC of 1 rollout"),
        ({"horizon": 0.0, "batch": None}, "Scores the static rate"),
        ({"horizon": 8.0, "batch": 4}, "Scores the VOC at horizon 8 of 4 rollouts"),
    ],
)
def test_the_page_names_the_value(value: dict[str, Any], text: str) -> None:
    assert text in sheet_page({**sheet(), "value": value})


def test_figures_that_no_tree_defines_stay_empty() -> None:
    blank = accuracy(1.0)
    blank["forgone_percent"] = {"value": None, "low": None, "high": None}
    assert "| **this scorer** |  | 3 [1.5, 6] |" in sheet_page({**sheet(), "accuracy": blank})


def test_both_files_stand_beside_the_scorer_and_replace_older_ones(tmp_path: Path) -> None:
    scorer = tmp_path / "deep" / "shuttle.onnx"
    for _ in range(2):
        data, page = write_sheet(sheet(), scorer)
    assert (data, page) == (scorer.with_suffix(".json"), scorer.with_suffix(".md"))
    assert json.loads(data.read_text()) == sheet()
    assert page.read_text() == sheet_page(sheet())
    assert len(list(scorer.parent.iterdir())) == 2


def test_the_bound_is_said_to_hold_as_often_as_it_did() -> None:
    estimate = {"value": 95.4321, "low": 95.1, "high": 95.8}
    worst = {"by": "noise", "slice": "1 to 2", "candidates": 8137, "covered_percent": 93.03}
    found = {"stated": 0.95, "covered_percent": estimate, "covered_live_percent": {"value": 94.0}}
    text = " ".join(bound_text({**found, "worst_slice": worst}))
    assert "stated 95 %: held for 95.4 [95.1, 95.8] % of all candidates, and for 94 %" in text
    assert "worst slice of 8,137 candidates (noise 1 to 2): 93 %" in text
    assert "slice" not in " ".join(bound_text({**found, "worst_slice": None}))
    assert bound_text(None) == bound_text({**found, "stated": None, "worst_slice": worst}) == []
