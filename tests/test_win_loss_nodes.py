"""Distribution functions of betas and outcomes of few rollouts in the graph, against SciPy."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import onnxruntime
import pytest
from ladder import BETA_CDF, BETA_TABLE, EXACT, ONNX_FLOAT, RELATIVE_TAIL
from onnx import TensorProto, helper
from scipy import special, stats

from distill.onnx_nodes import IR_VERSION, OPSET, Nodes, typed
from distill.tree import Floats
from distill.win_loss_nodes import Outcomes, beta_cdf

POINTS = 401
BATCHES = (1, 2, 3, 5, 8)


def run(g: Nodes, feed: dict[str, Floats], output: str, element: int) -> np.ndarray:
    inputs = [typed(name, TensorProto.DOUBLE, list(np.shape(x))) for name, x in feed.items()]
    graph = helper.make_graph(g.nodes, "t", inputs, [typed(output, element, ["a", "b"])], g.initializers)
    model = helper.make_model(graph, opset_imports=[helper.make_opsetid("", OPSET)], ir_version=IR_VERSION)
    session = onnxruntime.InferenceSession(model.SerializeToString(), providers=["CPUExecutionProvider"])
    return np.asarray(session.run([output], feed)[0])


def cdf_and_truth(a: float, b: float) -> tuple[Floats, Floats]:
    """The graph's and SciPy's distribution function over the support, or 7 deviations on each side."""
    mean = a / (a + b)
    sd = math.sqrt(mean * (b / (a + b)) / (a + b + 1))
    low, high = max(-mean / sd, -7.0), min(b / (a + b) / sd, 7.0)
    g = Nodes("t")
    out = beta_cdf(g, ("a", "b"), "z", POINTS)
    feed = {"a": np.array([[a]]), "b": np.array([[b]]), "z": np.array([[low], [high]])}
    z = low + (high - low) * (np.arange(POINTS) + 0.5) / POINTS
    # Near 1 the distance from 1 keeps its digits.
    truth = 1 - special.betainc(b, a, np.clip(b / (a + b) - sd * z, 0, 1))
    return run(g, feed, out, TensorProto.FLOAT)[0], truth


@pytest.mark.parametrize("a", [0.5, 0.6, 1.0, 1.7, 4.0, 60.0, 1999.0, 1e6, 1e9])
@pytest.mark.parametrize("b", [0.5, 1.0, 1.4, 9.0, 300.0, 1e9])
def test_beta_distribution_functions_agree_with_scipy(a, b):
    got, truth = cdf_and_truth(a, b)
    assert np.max(np.abs(got - truth)) <= BETA_CDF
    assert np.all((got > 0) & (got < 1))


def test_distribution_functions_are_symmetric():
    """P(p <= x) under Beta(a, b) is 1 - P(p <= 1 - x) under Beta(b, a)."""
    for a, b in ((0.6, 1.4), (3.0, 11.0)):
        one, other = cdf_and_truth(a, b)[0], cdf_and_truth(b, a)[0]
        np.testing.assert_allclose(one, 1 - other[::-1], atol=BETA_CDF / 10)


def slow_values(t: dict[str, Floats], best: Floats, horizon: float) -> Floats:
    """Value a rollout of each batch, shape (batches, n), by SciPy."""
    out = np.zeros((len(BATCHES), len(best)))
    for j in range(len(best)):
        alpha, beta = t["alpha"][j], t["beta"][j]
        for i, k in enumerate(BATCHES):
            w = np.arange(k + 1)
            total = alpha + beta + k
            p = (alpha + w) / total
            v = p * (1 - p) / (total + 1)
            if math.isfinite(horizon):
                v = v * horizon / (total + horizon)
            x = t["mean"][j] + p - alpha / (alpha + beta)
            theta = np.sqrt(v + t["spread2"][j])
            later = x if horizon == 0 else x * stats.norm.cdf(x / theta) + theta * stats.norm.pdf(x / theta)
            change = (t["rival"][j] - later) if best[j] else (later - t["rival"][j])
            out[i, j] = stats.betabinom.pmf(w, k, alpha, beta) @ np.maximum(change, 0) / k
    return out


def graph_values(t: dict[str, Floats], best: Floats, horizon: float, remaining: float) -> list[Floats]:
    """Best value, its batch, log of the best, log of each over it."""
    found = []
    for i, element in enumerate((TensorProto.DOUBLE,) * 3 + (TensorProto.FLOAT,)):
        g = Nodes("t")
        g("Add", "alpha", "beta", out="total")
        g("Div", "alpha", "total", out="wins")
        g("Div", "beta", "total", out="losses")
        g("Reshape", "is_best", g.whole(-1), out="best")
        outcomes = Outcomes(g, BATCHES, horizon=horizon, whole=False)
        out = outcomes.values(("wins", "losses"), "total", "mean", "rival", "spread2", "best")[i]
        if i == 1:
            out = g("Unsqueeze", out, g.whole(0))
        feed: dict[str, Any] = {name: x[None] for name, x in t.items()} | {"is_best": best[None]}
        if horizon == 0:
            feed.pop("spread2")
            g.nodes.insert(0, helper.make_node("Mul", ["mean", "mean"], ["spread2"]))
        found.append(run(g, feed | {"remaining": np.array(remaining)}, out, element))
    return found


@pytest.mark.parametrize(("a", "b"), [(0.3, 0.7), (0.05, 0.05), (0.1, 3.0)])
def test_u_shaped_beliefs_stay_close(a, b):
    got, truth = cdf_and_truth(a, b)
    assert np.max(np.abs(got - truth)) <= BETA_TABLE


@pytest.mark.parametrize("horizon", [math.inf, 0.0, 4.0])
def test_values_of_few_rollouts_agree_with_scipy(horizon):
    rng = np.random.default_rng(5)
    n = 60
    t = {
        "alpha": 10 ** rng.uniform(-1, 2, n),
        "beta": 10 ** rng.uniform(-1, 2, n),
        "mean": rng.normal(0, 0.3, n),
        "rival": rng.uniform(0, 0.5, n),
        "spread2": rng.uniform(0.001, 0.1, n),
    }
    best = (rng.random(n) < 0.4).astype(float)
    slow = slow_values(t, best, horizon)
    value, batch, log_best, each = graph_values(t, best, horizon, 100.0)
    np.testing.assert_allclose(value[0], slow.max(axis=0), rtol=RELATIVE_TAIL if horizon == 0 else 0,
                               atol=EXACT if horizon == 0 else ONNX_FLOAT)  # fmt: skip
    clear = np.sort(slow, axis=0)
    clear = (clear[-1] > 1e-3) & (clear[-1] > 1.01 * clear[-2])
    assert np.count_nonzero(clear) >= 10
    np.testing.assert_array_equal(batch[0][clear], np.array(BATCHES)[slow.argmax(axis=0)][clear])
    np.testing.assert_allclose(np.exp(log_best[0][clear]), value[0][clear], rtol=ONNX_FLOAT)
    seen = clear & np.all(slow > 1e-3, axis=0)
    ratio = np.log(slow[:, seen] / slow[:, seen].max(axis=0))
    np.testing.assert_allclose(each[:, seen], np.maximum(ratio, -6), atol=1e3 * ONNX_FLOAT)  # of 0.001


def test_batches_beyond_the_rollouts_left_count_for_nothing():
    t = {name: np.full(2, x) for name, x in
         {"alpha": 1.0, "beta": 1.0, "mean": 0.0, "rival": 0.3, "spread2": 0.01}.items()}  # fmt: skip
    best = np.zeros(2)
    slow = slow_values(t, best, math.inf)
    for remaining in (0, 1, 2, 4):
        value = graph_values(t, best, math.inf, float(remaining))[0][0]
        allowed = [i for i, k in enumerate(BATCHES) if k <= remaining]
        want = max((slow[i, 0] for i in allowed), default=0.0)
        np.testing.assert_allclose(value, want, atol=ONNX_FLOAT if want else 0)
