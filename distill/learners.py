"""The estimators that learn what the first-order value misses; floor 5.

All three are scikit-learn regressors of a unit-free value y = VOC / unit >= 0 and learn a transform t
of it, which serves small values and large ones better than y itself:

    "sqrt"       t = sqrt(y)                  y = max(t, 0)^2
    "log_ratio"  t = log(y / first_order)     y = first_order exp(t)

`model_` is the fitted scikit-learn regressor of t, the part that a scorer file contains. The same rows,
weights and seed give the same model, bit for bit, with any number of threads: linear algebra is held
to one thread, and histogram boosting adds each feature's histogram in row order whatever the threads.
"""

from __future__ import annotations

import os
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from typing import Any

# Before OpenMP starts: a thread that waits shall sleep, not spin. On shared cores spinning costs minutes.
os.environ.setdefault("OMP_WAIT_POLICY", "PASSIVE")

import numpy as np
from sklearn.base import BaseEstimator, RegressorMixin
from sklearn.ensemble import HistGradientBoostingRegressor
from sklearn.linear_model import Ridge
from sklearn.neural_network import MLPRegressor
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import StandardScaler
from sklearn.utils.validation import _check_sample_weight, check_is_fitted, validate_data
from threadpoolctl import threadpool_limits  # comes with scikit-learn

from distill.errors import InputError
from distill.tree import Floats

__all__ = ["TARGETS", "BoostingLearner", "DenseLearner", "LinearLearner", "decode", "encode"]

TARGETS = ("sqrt", "log_ratio")
_STEPS_A_PHASE = 2000
_LOG_RATIO_LIMIT = 20.0  # a learner that meets larger ratios would spend itself on values of no matter


def encode(y: Floats, first_order: Floats, target: str) -> Floats:
    """What a learner sees of a unit-free value; see the module's table.

    A log-ratio is cut at +-20, and is 0 where y or first_order is 0 (give those rows no weight).
    Raises InputError for an unknown target or a negative y.

    >>> encode(np.array([4.0, 0.0]), np.ones(2), "sqrt")
    array([2., 0.])
    """
    if target not in TARGETS:
        raise InputError("target", f"must be one of {', '.join(TARGETS)}", target)
    if np.any(y < 0):
        raise InputError("y", "must be >= 0", float(np.min(y)))
    if target == "sqrt":
        return np.asarray(np.sqrt(y))
    both = (y > 0) & (first_order > 0)
    log_ratio = np.log(np.where(both, y, 1)) - np.log(np.where(both, first_order, 1))
    return np.asarray(np.clip(log_ratio, -_LOG_RATIO_LIMIT, _LOG_RATIO_LIMIT))


def decode(t: Floats, first_order: Floats, target: str) -> Floats:
    """The unit-free value of a learned t; never negative.

    >>> decode(np.array([2.0, -1.0]), np.ones(2), "sqrt")
    array([4., 0.])
    """
    if target not in TARGETS:
        raise InputError("target", f"must be one of {', '.join(TARGETS)}", target)
    if target == "sqrt":
        return np.asarray(np.square(np.maximum(t, 0.0)))
    return np.asarray(first_order * np.exp(np.clip(t, -_LOG_RATIO_LIMIT, _LOG_RATIO_LIMIT)))


class _Learner(RegressorMixin, BaseEstimator):  # type: ignore[misc]
    """What the three learners share: checks, transform, and the fitted regressor of t in `model_`."""

    target: str

    def fit(
        self,
        X: Any,
        y: Any,
        sample_weight: Any = None,
        first_order: Any = None,
    ) -> Any:
        """Learn y from the rows of X.

        X : shape (n, d), finite. y : shape (n,), VOC / unit, >= 0. sample_weight : shape (n,), >= 0.
        first_order : shape (n,), first-order value / unit; None takes 1 everywhere.
        """
        X, y = validate_data(self, X, y, dtype=[np.float64, np.float32], y_numeric=True)
        weight = _check_sample_weight(sample_weight, X, dtype=np.float64)
        base = np.ones(len(y)) if first_order is None else np.asarray(first_order, dtype=float)
        t = encode(np.asarray(y, dtype=float), base, self.target)
        if self.target == "log_ratio":
            weight = np.where((y > 0) & (base > 0), weight, 0.0)
        rows = weight > 0  # others would only fill batches and leaves
        if not np.any(rows):
            raise InputError("sample_weight", "must be above 0 for at least one row that can be learned")
        with _one_blas_thread():
            self.model_ = self._fit_transformed(X[rows], t[rows], weight[rows])
        return self

    def predict(self, X: Any, first_order: Any = None) -> Floats:
        """VOC / unit of each row, >= 0; shape (n,). `first_order` as in `fit`."""
        check_is_fitted(self, "model_")
        X = validate_data(self, X, reset=False, dtype=[np.float64, np.float32])
        base = np.ones(len(X)) if first_order is None else np.asarray(first_order, dtype=float)
        with _one_blas_thread():
            t = np.asarray(self.model_.predict(X), dtype=float)
        return decode(t, base, self.target)

    def _fit_transformed(self, X: Floats, t: Floats, weight: Floats) -> Any:
        raise NotImplementedError

    def __sklearn_tags__(self) -> Any:
        tags = super().__sklearn_tags__()
        tags.target_tags.positive_only = True
        return tags


class BoostingLearner(_Learner):
    """Histogram gradient boosting (Friedman 2001), with monotone constraints where theory gives the sign.

    n_trees, n_leaves : size. learning_rate : None takes a rate that suits n_trees. monotone : one of
    -1, 0, 1 a column, or None. l2, min_leaf : regularisation. n_bins : histogram bins, at most 255.
    """

    def __init__(
        self,
        *,
        target: str = "sqrt",
        n_trees: int = 100,
        n_leaves: int = 31,
        learning_rate: float | None = None,
        min_leaf: int = 20,
        l2: float = 0.0,
        n_bins: int = 255,
        monotone: Sequence[int] | None = None,
        random_state: int | None = 0,
    ) -> None:
        self.target = target
        self.n_trees = n_trees
        self.n_leaves = n_leaves
        self.learning_rate = learning_rate
        self.min_leaf = min_leaf
        self.l2 = l2
        self.n_bins = n_bins
        self.monotone = monotone
        self.random_state = random_state

    def _fit_transformed(self, X: Floats, t: Floats, weight: Floats) -> Any:
        rate = self.learning_rate if self.learning_rate is not None else _rate_for(self.n_trees)
        model = HistGradientBoostingRegressor(
            max_iter=self.n_trees,
            max_leaf_nodes=self.n_leaves,
            learning_rate=rate,
            min_samples_leaf=self.min_leaf,
            l2_regularization=self.l2,
            max_bins=self.n_bins,
            monotonic_cst=None if self.monotone is None else list(self.monotone),
            # Its own early stopping would hold out rows, not trees; the sizes of the front are fixed.
            early_stopping=False,
            random_state=self.random_state,
        )
        return model.fit(X, t, sample_weight=weight)


class DenseLearner(_Learner):
    """A small fully connected network, inputs standardised, trained by Adam (Kingma and Ba 2015).

    layers : hidden widths. rates : learning rate of each phase; a falling rate settles the network.
    epochs : passes over the rows in each phase; None takes as many as make about 2,000 steps, from 4 to
    100. batch : rows a step, fewer where that leaves fewer than 32 steps an epoch. alpha : L2 penalty.
    """

    def __init__(
        self,
        *,
        target: str = "sqrt",
        layers: Sequence[int] = (32, 32),
        activation: str = "relu",
        rates: Sequence[float] = (1e-2, 3e-3, 1e-3, 2e-4),
        epochs: int | None = None,
        batch: int = 2048,
        alpha: float = 1e-7,
        random_state: int | None = 0,
    ) -> None:
        self.target = target
        self.layers = layers
        self.activation = activation
        self.rates = rates
        self.epochs = epochs
        self.batch = batch
        self.alpha = alpha
        self.random_state = random_state

    def _fit_transformed(self, X: Floats, t: Floats, weight: Floats) -> Any:
        scaler = StandardScaler().fit(X, sample_weight=weight)
        rows = scaler.transform(X)
        # The network learns a target of unit size; its last layer is scaled back afterwards.
        size = float(np.sqrt(np.average(t * t, weights=weight))) or 1.0
        batch = int(np.clip(len(rows) // 32, min(32, len(rows)), self.batch))
        epochs = self.epochs or int(np.clip(_STEPS_A_PHASE * batch / len(rows), 4, 100))
        t, weight = t.astype(rows.dtype), weight.astype(rows.dtype)  # float32 rows train in float32
        net = MLPRegressor(
            hidden_layer_sizes=tuple(self.layers),
            activation=self.activation,
            batch_size=batch,
            alpha=self.alpha,
            max_iter=epochs,
            n_iter_no_change=epochs + 1,
            tol=0.0,
            warm_start=True,
            random_state=self.random_state,
        )
        for rate in self.rates:
            net.set_params(learning_rate_init=rate)
            with _no_convergence_warning():
                net.fit(rows, t / size, sample_weight=weight / weight.mean())
        net.coefs_[-1] = net.coefs_[-1] * size
        net.intercepts_[-1] = net.intercepts_[-1] * size
        return make_pipeline(scaler, net)


class LinearLearner(_Learner):
    """Ridge regression on standardised columns: the least that a learner can do.

    alpha : L2 penalty, for a mean row.
    """

    def __init__(self, *, target: str = "sqrt", alpha: float = 1e-6, random_state: int | None = 0) -> None:
        self.target = target
        self.alpha = alpha
        self.random_state = random_state

    def _fit_transformed(self, X: Floats, t: Floats, weight: Floats) -> Any:
        X = X.astype(np.float64)  # the normal equations of related columns need it
        scaler = StandardScaler().fit(X, sample_weight=weight)
        ridge = Ridge(alpha=self.alpha * float(weight.sum()))
        ridge.fit(scaler.transform(X), t, sample_weight=weight)
        return make_pipeline(scaler, ridge)


def _rate_for(n_trees: int) -> float:
    """A learning rate that lets `n_trees` small steps reach the target."""
    return float(np.clip(10.0 / n_trees, 0.05, 0.3))


@contextmanager
def _one_blas_thread() -> Iterator[None]:
    """Sums of matrix products depend on how threads cut them; one thread cuts them one way."""
    with threadpool_limits(limits=1, user_api="blas"):
        yield


@contextmanager
def _no_convergence_warning() -> Iterator[None]:
    """The phases end by plan, not by convergence."""
    import warnings

    from sklearn.exceptions import ConvergenceWarning

    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ConvergenceWarning)
        yield
