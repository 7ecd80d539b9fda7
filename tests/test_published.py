"""Exact VOC of independent Gaussian leaves against published tables and formulas.

Every value stands in data/published_gaussian.json with its source; `from_memory` marks digits quoted from
memory. Each is held against its recomputation (`verified`), and against the digits as printed where
there are any and both agree (`status` ok).
"""

from __future__ import annotations

import json
import math
from collections import Counter
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest
from builders import bush
from ladder import CLOSED_FORM, PUBLISHED, QUADRATURE

from distill import voc
from distill.query import Query

ENTRIES = {
    e["id"]: e
    for e in json.loads((Path(__file__).parent / "data/published_gaussian.json").read_text())["entries"]
}
EXACT_LOOK = 1e-300  # noise variance of a rollout that shows its leaf's value


def expected_max(n):
    """E of the largest of n independent N(0, 1): the dynamic value of one action with n leaves."""
    return float(voc.price(bush([[0.0] * n], [[1.0] * n]), Query()).value[0]) if n > 0 else -math.inf


def excess(n, c):
    """E max(M - c, 0) for the largest M of n independent N(0, 1)."""
    return float(voc.price(bush([[0.0] * n + [c]], [[1.0] * n + [0.0]]), Query()).value[0]) - c


def variance_of_max(n):
    """Var M = 2 int_mu^inf E(M - c)+ dc + 2 int_-inf^mu E(c - M)+ dc with mu = E M, by parts."""
    mu = expected_max(n)
    t, w = np.polynomial.legendre.leggauss(48)
    upper, lower = mu + 4.5 * (t + 1), mu - 4.5 * (t + 1)
    above = sum(a * excess(n, c) for a, c in zip(w, upper.tolist(), strict=True))
    below = sum(a * (excess(n, c) - mu + c) for a, c in zip(w, lower.tolist(), strict=True))
    return 2 * 4.5 * (above + below)


def look(mean, var, noise_var, rivals, query):
    """VOC of the first leaf: one action with the leaves `mean`, `var`, and sure rival actions."""
    tree = bush([mean, *([r] for r in rivals)], [var, *([0.0] for _ in rivals)], noise_var)
    return float(voc.price(tree, query).voc[0])


def order_statistic(inputs):
    n, r = inputs["n"], inputs.get("r", 1)
    # The second largest of n: n E max of n - 1 is (n - 1) times it left out, plus the largest left in.
    return expected_max(n) if r == 1 else n * expected_max(n - 1) - (n - 1) * expected_max(n)


def unit_normal_loss(inputs):
    """Static VOC of N(0, 2) with noise variance 2, so that s = 1, against a sure z; L(z) = L(-z) - z."""
    z = float(inputs["z"])
    return look([0.0], [2.0], 2.0, [z], Query(0.0)) + max(-z, 0.0)


def knowledge_gradient(inputs):
    var = [float(1 / Fraction(b)) if "^" not in b else float(b[2:-2]) ** 2 for b in inputs["beta"]]
    tree = bush([[m] for m in inputs["mu"]], [[v] for v in var], 1 / inputs["beta_eps"])
    return float(voc.price(tree, Query(0.0)).voc[inputs["alternative"] - 1])


def sample_information(inputs):
    noise_var, n = (inputs["noise_sd"] ** 2, inputs["n"]) if "n" in inputs else (EXACT_LOOK, 1)
    prior = inputs["prior_sd"] ** 2
    return look([0.0], [prior], noise_var, [float(inputs["breakeven_minus_mean"])], Query(0.0, n))


def two_leaves(horizon):
    def value(inputs):
        noise = float(inputs.get("noise_var", EXACT_LOOK))
        return look([0.0, 0.0], [1.0, 1.0], noise, [float(inputs["c"])], Query(horizon))

    return value


def best_of_n_in_order(inputs):
    """v_n = E max(X, v_{n-1}), v_1 = 0: the last choice of each stage is a leaf against a sure value."""
    value = 0.0
    for _ in range(inputs["n"] - 1):
        value = float(voc.price(bush([[0.0, value]], [[1.0, 0.0]]), Query()).value[0])
    return value


def independent_max(inputs):
    m, s = inputs["m"], inputs["s"]
    return float(voc.price(bush([m], [[x * x for x in s]]), Query()).value[0]) - max(m)


def computed(entry):
    group, inputs = entry["group"], entry["inputs"]
    if group == "dynamic_voc":
        return two_leaves(0.0 if entry["id"].startswith("static") else math.inf)(inputs)
    return {
        "normal_order_stats": order_statistic,
        "normal_range": lambda i: 2 * expected_max(i["n"]),
        "normal_order_stats_var": lambda i: variance_of_max(i["n"]),
        "unit_normal_loss": unit_normal_loss,
        "knowledge_gradient": knowledge_gradient,
        "evsi_evpi": sample_information,
        "optimal_stopping": best_of_n_in_order,
        "independent_max": independent_max,
    }[group](inputs)


@pytest.mark.parametrize("name", ENTRIES)
def test_published_value(name):
    entry = ENTRIES[name]
    got, verified = computed(entry), float(entry["verified"])
    static = entry["group"] in ("unit_normal_loss", "knowledge_gradient", "evsi_evpi")
    scale = max(entry["inputs"].get("s", [1.0]))
    if static:
        assert got == pytest.approx(verified, rel=CLOSED_FORM)
    else:
        assert got == pytest.approx(verified, abs=QUADRATURE * scale)
    if entry["published"] is not None and entry["status"] == "ok":
        assert abs(got - float(entry["published"])) <= PUBLISHED * _last_place(entry["published"]) * (
            1 + 1e-9
        )


def _last_place(digits):
    """The unit of the last digit printed: 1e-4 of '.3989', 1e-30 of '7.47456e-25'."""
    mantissa, _, exponent = digits.lower().partition("e")
    return 10.0 ** (int(exponent or 0) - len(mantissa.partition(".")[2]))


def test_enough_values_and_every_one_with_a_source():
    groups = Counter(e["group"] for e in ENTRIES.values())
    assert sum(groups.values()) >= 150
    assert all(e["source"]["title"] and e["source"]["where"] for e in ENTRIES.values())
