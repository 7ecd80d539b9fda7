"""Scorer files: the estimator repeated, the decision made, the bytes clean and the same."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import onnx
import onnxruntime
import pytest
from ladder import EXACT, ONNX_DOUBLE, ONNX_ELSEWHERE, ONNX_FLOAT
from leaf_tables import rows, table
from scorers import KINDS, arguments, fitted, graph, scorer_bytes, training, upper_bound
from sklearn.ensemble import GradientBoostingRegressor, HistGradientBoostingRegressor
from sklearn.linear_model import Ridge
from sklearn.neural_network import MLPRegressor
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import MinMaxScaler, StandardScaler

from distill.calibration import bin_columns
from distill.converters import convert, folded
from distill.errors import ExportError
from distill.export import TRANSFORMS, export_scorer, mapped_back
from distill.feature_graph import FeatureGraph
from distill.features import build_graph
from distill.metrics import Groups
from distill.runtime import Scorer


def run(model, x):
    options = onnxruntime.SessionOptions()
    options.intra_op_num_threads = 1
    session = onnxruntime.InferenceSession(
        model.SerializeToString(), options, providers=["CPUExecutionProvider"]
    )
    return session.run(None, {"x": x})[0].ravel()


def boosted(seed, **options):
    rng = np.random.default_rng(seed)
    X = rng.normal(size=(3000, 5))
    X[rng.random(X.shape) < 0.05] = np.nan
    y = np.nan_to_num(X[:, 0]) * 2 + np.sin(np.nan_to_num(X[:, 1]))
    return X, HistGradientBoostingRegressor(max_iter=15, max_leaf_nodes=12, **options).fit(X, y)


def hard_rows(model, X, n):
    """Random rows, rows on every split and next to it, NaN, infinities and zeros."""
    rng = np.random.default_rng(0)
    rows_ = X[rng.integers(0, len(X), n)].copy()
    for predictors in model._predictors:
        nodes = predictors[0].nodes
        inner = nodes[nodes["is_leaf"] == 0]
        for threshold in (
            inner["num_threshold"],
            np.nextafter(inner["num_threshold"], np.inf),
            np.nextafter(inner["num_threshold"], -np.inf),
        ):
            at = rng.integers(0, n, len(inner))
            rows_[at, inner["feature_idx"]] = threshold
    for value in (np.nan, np.inf, -np.inf, 0.0, 1e300, -1e300):
        rows_[rng.random(rows_.shape) < 0.01] = value
    return rows_


@pytest.mark.parametrize(
    "options",
    [
        {},
        {"loss": "absolute_error"},
        {"loss": "quantile", "quantile": 0.9},
        {"monotonic_cst": [1, 0, 0, 0, 0]},
    ],
    ids=["squared", "absolute", "quantile", "monotone"],
)
def test_boosting_is_repeated_bit_for_bit(options):
    X, model = boosted(1, **options)
    x = hard_rows(model, X, 20_000)
    np.testing.assert_array_equal(run(convert(model, 5), x), model.predict(x))
    assert ONNX_DOUBLE == 0


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(3))
def test_boosting_is_repeated_bit_for_bit_on_a_million_rows(seed):
    X, model = boosted(seed)
    x = hard_rows(model, X, 1_000_000)
    np.testing.assert_array_equal(run(convert(model, 5), x), model.predict(x))


def test_a_tree_of_one_leaf_is_repeated():
    X = np.arange(40.0).reshape(-1, 1)
    model = HistGradientBoostingRegressor(max_iter=3).fit(X, np.full(40, 2.5))
    assert all(len(p[0].nodes) == 1 for p in model._predictors)
    np.testing.assert_array_equal(run(convert(model, 1), X), model.predict(X))


@pytest.mark.parametrize("activation", ["relu", "tanh", "logistic", "identity"])
def test_networks_and_linear_models_are_repeated_to_float32(activation):
    rng = np.random.default_rng(2)
    X = (rng.normal(size=(400, 5)) * [1, 10, 0.1, 3, 1] + [0, 50, 3, 0, 0]).astype(np.float32)
    y = np.tanh(X[:, 0]) + 0.1 * X[:, 3]
    net = MLPRegressor(hidden_layer_sizes=(8, 4), activation=activation, solver="lbfgs", tol=0.1)
    net.set_params(max_iter=500, max_fun=10**6, random_state=0)
    for model in (
        make_pipeline(StandardScaler(), net),
        net,
        make_pipeline(StandardScaler(), Ridge()),
        Ridge(),
    ):
        model.fit(X, y)
        size = max(1.0, np.abs(y).max())
        got = run(convert(model, 5), X)
        np.testing.assert_allclose(got, model.predict(X), rtol=0, atol=ONNX_FLOAT * size)


def test_folding_takes_the_scaler_away():
    assert isinstance(folded(fitted("dense")), MLPRegressor)
    assert [n.op_type for n in convert(fitted("linear"), len(graph().names)).graph.node] == ["Gemm"]


def test_what_cannot_be_repeated_is_refused():
    X = np.random.default_rng(3).normal(size=(200, 4))
    y = np.abs(X[:, 0]) + 1
    refused = {
        "GradientBoostingRegressor": GradientBoostingRegressor(n_estimators=2),
        "poisson": HistGradientBoostingRegressor(max_iter=2, loss="poisson"),
        "MinMaxScaler": make_pipeline(MinMaxScaler(), Ridge()),
        "StandardScaler before Hist": make_pipeline(
            StandardScaler(), HistGradientBoostingRegressor(max_iter=2)
        ),
        "categorical": HistGradientBoostingRegressor(max_iter=2, categorical_features=[1]),
    }
    for word, model in refused.items():
        at = X.copy()
        at[:, 1] = np.arange(200) % 3
        with pytest.raises(ExportError, match=word):
            convert(model.fit(at, y + at[:, 1] % 2), 4)
    with pytest.raises(ExportError, match="3 features, the graph 4"):
        convert(Ridge().fit(X[:, :3], y), 4)
    with pytest.raises(ExportError, match="output"):
        convert(Ridge().fit(X, np.stack([y, y], axis=1)), 4)


def limits():
    """Least and largest value of each feature that is in range."""
    return training().x.min(axis=0), training().x.max(axis=0)


@pytest.mark.parametrize("transform", TRANSFORMS)
@pytest.mark.parametrize("kind", KINDS)
def test_the_file_repeats_estimator_transform_and_decision(kind, transform):
    scorer = Scorer.from_bytes(scorer_bytes(kind, transform), strict=True)
    model = fitted(kind, transform)
    low, high = limits()
    for seed in range(5):
        t = table(np.random.default_rng(100 + seed), 24, 4)
        matrix = graph().matrix(t)
        inside = np.all((matrix.x >= low) & (matrix.x <= high), axis=1)
        got = scorer.score(**t)
        np.testing.assert_array_equal(got.in_range, inside)
        learned = np.asarray(model.predict(np.clip(matrix.x, low, high)), dtype=float)
        expected = mapped_back(learned, matrix.unit, matrix.first_order, transform)
        np.testing.assert_allclose(got.voc[inside], expected[inside], rtol=ONNX_ELSEWHERE, atol=EXACT)
        np.testing.assert_array_equal(got.batch[inside], matrix.batch[inside])
        one_tree = Groups.of(np.zeros(24, dtype=int))
        told_by = bin_columns(np.clip(matrix.x, low, high), matrix.leaf_sd, one_tree)
        np.testing.assert_array_equal(got.voc_high[inside], (got.voc * upper_bound().of(told_by))[inside])
        assert got.pick == int(np.argmax(got.voc - t["cost"]))
        assert got.worth_it == bool(np.max(got.voc - t["cost"]) > 0)
        assert scorer.pick(**t) == got.pick


def test_the_feature_nodes_of_the_file_are_the_graph_that_training_ran():
    features = build_graph()
    model = onnx.load_model_from_string(scorer_bytes("dense"))
    # Outputs that only training reads stay out of the file.
    only_training = {"features", "unit"}
    shared = [node for node in features.graph.node if node.output[0] not in only_training]
    assert list(model.graph.node[: len(shared)]) == shared
    constants = {c.name: c for c in model.graph.initializer}
    assert all(constants[c.name] == c for c in features.graph.initializer)
    assert list(model.graph.input) == list(features.graph.input)


def test_files_are_clean_and_the_same_in_every_process(tmp_path):
    data = scorer_bytes("boosting")
    onnx.checker.check_model(onnx.load_model_from_string(data), full_check=True)
    code = "import sys; from scorers import scorer_bytes; sys.stdout.buffer.write(scorer_bytes('boosting'))"
    for seed in ("1", "2"):
        done = subprocess.run(
            [sys.executable, "-c", code],
            cwd=Path(__file__).parent,
            env={"PYTHONHASHSEED": seed, "PATH": "", "OMP_NUM_THREADS": seed},
            capture_output=True,
            check=True,
        )
        assert done.stdout == data
    path = tmp_path / "deep" / "scorer.onnx"
    assert export_scorer(**arguments("boosting"), path=path) == path.read_bytes() == data


def with_measured(data: bytes, facts: dict[str, float]) -> bytes:
    """The same file with the metadata key `measured`, which a file may have."""
    model = onnx.load_model_from_string(data)
    model.metadata_props.add(key="measured", value=json.dumps(facts))
    return model.SerializeToString(deterministic=True)


def test_metadata_say_what_the_file_is():
    scorer = Scorer.from_bytes(with_measured(scorer_bytes(), {"p50_us": 41.5}))
    facts = scorer.facts
    assert facts["format"] == "voc-scorer/2"
    assert facts["transform"] == "log_ratio"
    assert facts["features"] == list(graph().names)
    assert facts["calibration"] == {"coverage": 0.95, "trees": 40, "candidates": 800, "bins": 3}
    assert facts["about"] == {"recipe": "dense", "family": "rule"}
    assert facts["measured"] == {"p50_us": 41.5}
    ranges = np.array([facts["ranges"][name] for name in facts["features"]])
    np.testing.assert_array_equal(ranges.astype(np.float32), np.stack(limits(), axis=1))


def test_arguments_that_cannot_be_used_are_named():
    good = arguments()
    for change, word in (
        ({"transform": "cube"}, "transform"),
        ({"ranges": good["ranges"][:2]}, "shape"),
        ({"ranges": good["ranges"][:, ::-1]}, "least before largest"),
        ({"ranges": np.full_like(good["ranges"], np.nan)}, "finite"),
        ({"metadata": {"x": np.nan}}, "JSON"),
        ({"metadata": {"x": {1, 2}}}, "JSON"),
        ({"self_test_columns": {k: v[:0] for k, v in good["self_test_columns"].items()}}, "at least one row"),
    ):
        with pytest.raises(ExportError, match=word):
            export_scorer(**{**good, **change})


class Off(Ridge):
    """An estimator that predicts something else than its coefficients say."""

    def predict(self, X):
        return super().predict(X) + 1e-3


def test_a_file_that_does_not_repeat_the_estimator_is_not_written(tmp_path, monkeypatch):
    model = Off().fit(training().x, training().x[:, 0])
    path = tmp_path / "scorer.onnx"
    monkeypatch.setattr("distill.converters._LINEAR", (Off,))
    with pytest.raises(ExportError, match="differs from the estimator"):
        export_scorer(**{**arguments(), "estimator": model}, path=path)
    assert not path.exists()


def test_a_wrong_assembly_is_not_written(tmp_path, monkeypatch):
    """The decision part is checked too: here the file's own cut of t is not the one that is stated."""
    monkeypatch.setattr("distill.export._LOG_RATIO_LIMIT", 0.01)
    stated = export_scorer(**arguments())
    assert Scorer.from_bytes(stated).facts["transform"] == "log_ratio"

    def other(t, unit, first_order, transform):
        return mapped_back(t * 1.001, unit, first_order, transform)

    monkeypatch.setattr("distill.export.mapped_back", other)
    monkeypatch.setattr("distill.export._LOG_RATIO_LIMIT", 20.0)
    with pytest.raises(ExportError, match="where the estimator gives"):
        export_scorer(**arguments(), path=tmp_path / "scorer.onnx")
    assert not list(tmp_path.iterdir())


def test_other_bounds_than_the_calibrated_ones_are_not_written(monkeypatch):
    monkeypatch.setattr("distill.calibration.UpperBound.of", lambda _, x: np.full(len(x), 1.3))
    with pytest.raises(ExportError, match="upper bounds differ"):
        export_scorer(**arguments())


def test_leaves_in_rows_of_many_trees_score_as_each_tree_alone():
    columns = rows(np.random.default_rng(5), 6)
    scorer = Scorer.from_bytes(scorer_bytes())
    whole = scorer.score(**columns)
    assert len(whole.pick) == len(whole.worth_it) == 6
    for i in range(6):
        at = columns["tree"] == i
        alone = {k: v[at] for k, v in columns.items() if k not in ("tree", "remaining")}
        got = scorer.score(**alone, remaining=int(columns["remaining"][at][0]))
        np.testing.assert_array_equal(whole.voc[at], got.voc)
        assert whole.pick[i] == got.pick


def test_graph_of_other_points_exports_too():
    small = FeatureGraph(build_graph(points=8))
    data = export_scorer(**{**arguments("linear"), "feature_graph": small})
    assert Scorer.from_bytes(data).pick(**table(np.random.default_rng(1), 9, 3)) in range(9)
