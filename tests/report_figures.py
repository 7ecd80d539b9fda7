"""Figures as train, ship and a tour leave them, for tests of the report page."""

from __future__ import annotations

from typing import Any

import pytest

from distill.break_even import break_even


def estimate(value: float | None, spread: float = 0.3) -> dict[str, float | None]:
    if value is None:
        return {"value": None, "low": None, "high": None}
    return {"value": value, "low": value * (1 - spread), "high": value * (1 + spread)}


def accuracy(forgone: float | None, relative: float | None) -> dict[str, Any]:
    return {
        "forgone_percent": estimate(forgone),
        "relative_forgone_percent": estimate(relative),
        "top1_percent": estimate(71.23),
        "rank_correlation": estimate(0.6543),
        "stop_loss_percent": estimate(1.987),
        "stop_loss": [],
        "trees": 1754,
        "candidates": 45485,
        "trees_with_best_zero": 3,
        "interval_level": 0.95,
        "in_range_percent": 99.9934,
    }


def parts() -> dict[str, Any]:
    """What `validate.examine` adds for held-out trees."""
    sizes = [1e-8, 1e-4, 0.02]
    return {
        "slices": [
            {
                "by": by,
                "slice": name,
                "trees": 577,
                "candidates": 14902,
                "forgone_percent": estimate(share),
                "relative_forgone_percent": estimate(1.5),
                "covered_percent": 94.4,
            }
            for by, name, share in (
                ("leaves", "2 to 17", 0.0321),
                ("leaves", "18 to 66", 0.0),
                ("gap", "<b>", 2.5),
            )
        ],
        "calibration": {
            "stated": 0.95,
            "covered_percent": estimate(95.31, 0.004),
            "covered_live_percent": estimate(93.77, 0.004),
            "bins": [
                {"from": x / 2, "to": 2 * x, "candidates": 901, "mean_exact": 1.1 * x, "mean_score": x,
                 "covered_percent": 93.0 + i}
                for i, x in enumerate(sizes)
            ],
            "worst_slice": {"by": "gap", "slice": "<b>", "candidates": 8137, "covered_percent": 92.61},
        },
        "stop_curve": [
            {"price": p, "value": v, "low": 0.0, "high": 2 * v, "stop_at_once": 0.0169, "go_on": 1.1 * p}
            for p, v in ((1e-6, 0.0), (1e-3, 2.5e-8), (0.1, 1.9e-6))
        ],
    }  # fmt: skip


def shifts() -> dict[str, Any]:
    """What `shift.measure_shifts` leaves."""
    return {
        name: accuracy(share, 2.1)
        | {
            "first_order_forgone_percent": start,
            "covered_percent": 95.2,
            "flagged_trees_percent": flagged,
            "loss_flagged_percent": flagged,
            "aside": 0,
            "changed": f"what {name} changes",
        }
        for name, share, start, flagged in (
            ("as given", 0.0213, 0.77, 0.5),
            ("one level deeper", 0.35, 1.23, None),
            ("correlation", 12.5, 14.2, 61.3),
        )
    }


def scorer(recipe: str, us: float, forgone: float | None, on_front: bool) -> dict[str, Any]:
    return {
        "recipe": recipe,
        "file": f"{recipe}.onnx",
        "sha256": "ab" * 32,
        "held_out": accuracy(forgone, 9.1 + us / 7) | parts(),
        "choose": accuracy(forgone, 9.2),
        "pairs": {
            "exact": [0.0, 2e-6, 0.0123, 0.2],
            "predicted": [3e-7, 0.0, 0.0125, 0.19],
            "least": 1e-8,
            "trees": 184,
            "candidates": 2577,
            "smaller": 2242,
        },
        "latency": {"p50_us": us, "p99_us": us * 1.7, "calls": 2000},
        "bytes": 347397,
        "fit_seconds": 34.51,
        "on_front": on_front,
    }


def front_figures() -> dict[str, Any]:
    random_pick = {"forgone_percent": {"value": 88.82}, "relative_forgone_percent": {"value": 90.1}}
    return {
        "format": "voc-front/1",
        "value": {"horizon": "inf", "batch": None},
        "data": {"source": "cold-store", "source_sha256": "cd" * 32, "seed": 7, "trees": 12000},
        "parts": {
            "fit": {"trees": 9055, "candidates": 235752},
            "choose": {"trees": 1191, "candidates": 31006},
            "held_out": {"trees": 1754, "candidates": 45485},
        },
        "seed": 11,
        "scorers": [
            scorer("linear", 24.1, 6.107, True),
            scorer("boosting 25x8", 38.4, 0.5928, False),
            scorer("boosting 100x31", 170.2, 0.0663, True),
            scorer("dense 32-32", 36.6, 0.0212, True),
        ],
        "beside": {
            "static closed form": accuracy(23.76, 43.5),
            "first-order closed form": accuracy(9.843, 33.5),
            "random pick": random_pick,
        },
        "peers": {
            "first-order closed form": accuracy(9.843, 33.5)
            | {"latency": {"p50_us": 26.1, "p99_us": 31.2, "calls": 400}},
            "UCT": accuracy(42.99, 63.7) | {"latency": {"p50_us": 8.13, "p99_us": 15.5, "calls": 400}},
        },
        "break_even": break_even(
            {"dense 32-32": (0.0212, 36.6), "UCT": (42.99, 8.13), "exact dynamic rate": (0.0, 10293.9)},
        ),
        "leaves": 64,
        "exact": {
            "dynamic VOC": {"p50_us": 318.8, "p99_us": 419.4, "calls": 20},
            "dynamic rate": {"p50_us": 10293.9, "p99_us": 20005.6, "calls": 20},
        },
        "features": ["best", "influence"],
        "made_with": {"python": "3.11.7", "machine": "x86_64, 2 cores"},
    }


def sheet_figures() -> dict[str, Any]:
    front = front_figures()
    entry = front["scorers"][3]
    return {
        "format": "voc-sheet/1",
        "file": {"name": "shuttle.onnx", "sha256": entry["sha256"], "bytes": entry["bytes"]},
        "recipe": entry["recipe"],
        "chosen": "most accurate",
        "value": front["value"],
        "data": {**front["data"], "parts": front["parts"]},
        "seed": front["seed"],
        "accuracy": entry["held_out"],
        "pairs": entry["pairs"],
        "beside": front["beside"],
        "peers": front["peers"],
        "break_even": front["break_even"],
        "shifts": shifts(),
        "decision": {
            "leaves": 64,
            "scorer": entry["latency"],
            "exact": front["exact"],
            "times_faster": {"dynamic VOC": 8.7104, "dynamic rate": 281.254},
        },
        "front": front["scorers"],
        "features": front["features"],
        "made_with": front["made_with"],
    }


def summary_figures() -> dict[str, Any]:
    rows = {
        "scorer trained on the family alone": accuracy(0.167, 1.77),
        "scorer trained on traces": accuracy(0.58, 1.79),
        **front_figures()["beside"],
    }
    one_tree = {"exact": [0.0001368, 0.0], "scorer": [0.00014, 2.2e-22], "exact_pick": 0, "scorer_pick": 0}
    return {"scorer": sheet_figures(), "on traces": rows, "one tree": one_tree, "seconds": 626.2}


def audit_figures() -> dict[str, Any]:
    """What `audit.audit` finds, with values that are 0, tiny, and columns that never vary."""
    now, promised = accuracy(0.00962, 0.0139), accuracy(0.0172, 0.0578)
    now["stop_loss_percent"], promised["stop_loss_percent"] = estimate(0.0), estimate(2.96e-5)
    keys = ("forgone_percent", "relative_forgone_percent", "stop_loss_percent")
    columns = {
        "actions": ([6.0] * 5, [2.0, 3.0, 4.0, 5.0, 6.0], 0.8),
        "chance share": ([0.0] * 5, [0.0] * 5, 0.0),
        "gain": ([0.98] * 5, [0.91, 0.93, 0.95, 0.98, 1.0], 0.79),
        "a feature with a name that is far too long to stand": ([-31.0, -2.0, 0.0, 1e3, 2e5], [], 0.27),
    }
    return {
        "scorer": {"name": "s.onnx", "sha256": "ab" * 32, "recipe": "dense 32-32", "input": "leaf table"},
        "traces": ["taxi.jsonl.gz"],
        "seed": 0,
        "trees": {"recorded": 250, "sampled": 200, "judged": 199, "decisions": 50, "aside": {"no price": 1},
                  "worth adding": 1},
        "margin": 0.5,
        "judged": {key: {"now": now[key], "promised": promised[key], "worse": False} for key in keys},
        "worse": False,
        "verdict": "as promised: forgone share 0.00962 %, promised 0.0172 %",
        "now": now,
        "promised": promised,
        "out_of_range_percent": 0.0,
        "bound": {"held_percent": 98.5},
        "drift": {
            "reference": "cold-store",
            "at": [0.05, 0.25, 0.5, 0.75, 0.95],
            "chance": 0.236,
            "columns": {
                name: {"meaning": name, "now": a, "training": b, "distance": d, "drifted": d > 0.3}
                for name, (a, b, d) in columns.items()
            },
        },
        "label_error_percent": 9e-10,
        "pairs": scorer("linear", 1.0, 1.0, True)["pairs"],
    }  # fmt: skip


ALL = {"front": front_figures, "sheet": sheet_figures, "summary": summary_figures}
every_kind = pytest.mark.parametrize("figures", [f() for f in ALL.values()], ids=list(ALL))
