"""The agent's backup: moments up, crossings down, and one path anew after one rollout."""

from __future__ import annotations

import dataclasses
import math
from pathlib import Path

import numpy as np
import pytest
from chance_trees import build, leaf
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import (
    BACKUP_FIT,
    BACKUP_MOMENTS,
    CLOSED_FORM,
    EXACT,
    FEATURE_TABLE,
    FINITE_DIFFERENCE,
    RELATIVE_TAIL,
)
from scipy import stats

from distill import schema
from distill.backup import Backup, backup_of, max_moments
from distill.backup_compiled import CompiledBackup
from distill.backup_correlated import CorrelatedBackup
from distill.errors import InputError, RefusedError
from distill.family import draw, load_family
from distill.query import Query, scale_of
from distill.record import from_record
from distill.tree import BeliefTree
from distill.voc import price

FAMILIES = Path(__file__).parents[1] / "datasets" / "families"

seeds = st.integers(0, 2**31 - 1)
HORIZONS = (math.inf, 0.0, 7.0)


def drawn(family: str, seed: int, index: int = 0) -> BeliefTree:
    return draw(load_family(FAMILIES / f"{family}.toml"), seed, index)


def state(b):
    return [b.mean, b.var, b.value, *b.rows().values()]


def actions_of(tree: BeliefTree) -> np.ndarray:
    """Root action of each leaf."""
    action = np.full(tree.n_nodes, -1)
    action[tree.action_nodes] = np.arange(len(tree.action_nodes))
    for c in range(1, tree.n_nodes):
        if tree.parent[c] > 0:
            action[c] = action[tree.parent[c]]
    return action[tree.leaf_nodes]


def shifted(tree: BeliefTree, scale: float, shift: float) -> BeliefTree:
    """The same tree in other units, every action worth `shift` more."""
    reward = np.where(tree.parent == 0, tree.reward + shift, tree.reward) * scale
    assert tree.mean is not None
    columns = {
        "mean": tree.mean * scale,
        "var": None if tree.var is None else tree.var * scale**2,
        "cov": None if tree.cov is None else tree.cov * scale**2,
        "noise_var": tree.noise_var * scale**2,
        "cost": tree.cost * scale,
    }
    return dataclasses.replace(tree, reward=reward, **columns)


# --- up --------------------------------------------------------------------------------------------


@pytest.mark.parametrize("n", [2, 3, 9])
def test_moments_of_a_maximum_agree_with_a_fine_grid(n):
    rng = np.random.default_rng(n)
    m, v = rng.normal(0, 1, n), rng.gamma(2, 0.5, n)
    x = np.linspace(-12, 14, 20_001)

    def slow(keep):
        cdf = np.exp(sum(stats.norm.logcdf(x, m[j], np.sqrt(v[j])) for j in keep))
        mean = x[-1] - np.trapezoid(cdf, x)
        return mean, x[-1] ** 2 - np.trapezoid(2 * x * cdf, x) - mean**2

    found, sd = max_moments(m, v), np.sqrt(v.max())
    mean, var = slow(range(n))
    assert abs(found.mean - mean) <= FEATURE_TABLE * sd
    assert abs(found.var - var) <= 4 * FEATURE_TABLE * sd**2
    for i in range(n):
        mean, var = slow([j for j in range(n) if j != i])
        assert abs(found.others[i] - mean) <= FEATURE_TABLE * sd
        assert abs(found.others_var[i] - var) <= 4 * FEATURE_TABLE * sd**2


@pytest.mark.parametrize("family", ["cold-store", "crossing-traffic", "shared-aisles"])
def test_values_agree_with_the_exact_engine(family):
    for horizon in (math.inf, 5.0):
        for i in range(4):
            tree = drawn(family, 3, i)
            if tree.cov is not None and horizon != math.inf:
                continue
            exact = price(tree, Query(horizon=horizon)).value
            off = np.max(np.abs(backup_of(tree, horizon).value - exact))
            assert off <= BACKUP_MOMENTS * scale_of(tree), (horizon, i)


@settings(deadline=None, max_examples=15, derandomize=True)
@given(seeds, st.sampled_from(["cold-store", "crossing-traffic", "shared-aisles", "on-time"]))
def test_without_rollouts_to_come_a_maximum_is_one_of_means(seed, family):
    tree = drawn(family, seed)
    exact = price(tree, Query(horizon=0)).value
    np.testing.assert_allclose(
        backup_of(tree, 0).value, exact, rtol=CLOSED_FORM, atol=CLOSED_FORM * scale_of(tree)
    )


# --- one path --------------------------------------------------------------------------------------


@settings(deadline=None, max_examples=25, derandomize=True)
@given(seeds, st.sampled_from(["cold-store", "crossing-traffic", "on-time"]), st.sampled_from(HORIZONS))
def test_one_path_anew_gives_the_numbers_of_a_whole_pass(seed, family, horizon):
    tree = drawn(family, seed)
    rng = np.random.default_rng(seed)
    names = schema.GAUSSIAN_COLUMNS[:2] if tree.mean is not None else schema.WIN_LOSS_COLUMNS[:2]
    columns = {name: np.array(getattr(tree, name)) for name in names}
    kept = Backup(tree, horizon)
    for _ in range(4):
        i = int(rng.integers(tree.n_leaves))
        belief = {name: float(abs(columns[name][i]) + 0.1 + rng.gamma(1, 1)) for name in names}
        kept.update(i, **belief)
        for name, x in belief.items():
            columns[name][i] = x
    whole = Backup(dataclasses.replace(tree, **columns), horizon)
    for a, b in zip(state(kept), state(whole), strict=True):
        np.testing.assert_allclose(a, b, rtol=CLOSED_FORM, atol=0)


def test_an_update_leaves_other_actions_alone():
    tree = drawn("crossing-traffic", 4)
    b = Backup(tree)
    before = b.mean.copy()
    b.update(0, mean=5.0, var=0.5)
    path = [int(tree.leaf_nodes[0])]
    while path[-1] > 0:
        path.append(int(tree.parent[path[-1]]))
    changed = np.flatnonzero(~np.equal(before, b.mean) & ~np.isnan(before))
    assert set(changed) <= set(path)


def test_a_correlated_update_is_a_pass_over_the_posterior():
    tree = drawn("shared-aisles", 1)
    b = CorrelatedBackup(tree)
    mean, cov = tree.mean + 0.3, tree.cov * 0.5
    b.update(mean, cov)
    for a, c in zip(
        state(b), state(CorrelatedBackup(dataclasses.replace(tree, mean=mean, cov=cov))), strict=True
    ):
        np.testing.assert_array_equal(a, c)


# --- down ------------------------------------------------------------------------------------------


@settings(deadline=None, max_examples=25, derandomize=True)
@given(seeds)
def test_a_leaf_moved_to_its_crossing_makes_its_action_level(seed):
    """Pairs only, where the maximum is Clark's closed form throughout and the model of a move is exact."""
    rng = np.random.default_rng(seed)

    def node(depth):
        if depth == 0:
            return leaf(rng.normal(), rng.gamma(2, 0.5))
        pair = [node(depth - 1), node(depth - 1)]
        if rng.random() < 0.5:
            p = rng.uniform(0.2, 0.8)
            return ("edge", rng.normal(), 0.9, ("mean", [(p, pair[0]), (1 - p, pair[1])]))
        return ("edge", rng.normal(), 0.9, ("max", pair))

    tree = build(("mean", [(0.3, node(1)), (0.7, leaf(0, 1))]), node(1), leaf(0.2, 1.0))
    b = Backup(tree)
    row, sd = b.crossings(), np.sqrt(tree.var)
    action = actions_of(tree)
    best = int(np.argmax(b.value))
    second = np.max(np.delete(b.value, best))
    for i in range(6):
        if row.slope[i] < 1e-6:
            continue
        moved = Backup(tree)
        moved.update(i, mean=float(tree.mean[i] + row.crossing[i] * sd[i]))
        rival = second if action[i] == best else b.value[best]
        assert abs(moved.value[action[i]] - rival) <= RELATIVE_TAIL * scale_of(tree)
        assert (row.crossing[i] <= 0) == (action[i] == best)
        near = Backup(tree)
        near.update(i, mean=float(tree.mean[i] + (row.crossing[i] + 1e-3) * sd[i]))
        rise = (near.value[action[i]] - moved.value[action[i]]) / 1e-3
        np.testing.assert_allclose(rise, row.slope[i] * (1 + 0.5e-3 * row.bend[i]), rtol=FINITE_DIFFERENCE)


def test_influence_is_the_slope_of_the_value():
    tree = drawn("crossing-traffic", 11)
    b = Backup(tree)
    share = b.influence()
    assert np.all((share >= 0) & (share <= 1))
    actions = np.zeros(len(b.value))
    total = np.zeros(len(b.value))
    for i in range(tree.n_leaves):
        up, down = Backup(tree), Backup(tree)
        d = 1e-3 * math.sqrt(tree.var[i]) if tree.var[i] > 0 else 1e-3
        up.update(i, mean=float(tree.mean[i] + d))
        down.update(i, mean=float(tree.mean[i] - d))
        slopes = (up.value - down.value) / (2 * d)
        a = int(np.argmax(np.abs(slopes))) if np.any(slopes) else 0
        assert abs(slopes[a] - share[i]) <= BACKUP_FIT
        total[a] += share[i]
        actions[a] += 1
    assert np.all(total <= 1 + BACKUP_FIT * tree.n_leaves)


def test_correlated_and_independent_backups_meet_on_pairs():
    tree = build(
        ("max", [leaf(0, 1), leaf(0.5, 2, 3.0)]), ("max", [leaf(0.3, 0.7), leaf(-1, 4.0)]), leaf(0.8, 1)
    )
    dense = dataclasses.replace(tree, var=None, cov=np.diag(tree.var))
    for horizon in HORIZONS:
        a, b = Backup(tree, horizon), CorrelatedBackup(dense, horizon)
        np.testing.assert_allclose(b.value, a.value, rtol=CLOSED_FORM)
        np.testing.assert_allclose(b.value_var, a.value_var, rtol=CLOSED_FORM, atol=CLOSED_FORM)
        there = a.crossings().slope > 1e-9
        if horizon > 0:
            for name in ("crossing", "slope", "bend", "now"):
                x, y = getattr(a.crossings(), name), getattr(b.crossings(), name)
                np.testing.assert_allclose(
                    y[there], x[there], rtol=RELATIVE_TAIL, atol=RELATIVE_TAIL, err_msg=f"{name} {horizon}"
                )


def test_lines_cross_where_they_do_when_no_rollout_follows():
    """Two correlated leaves as actions: the difference along b_i is gap + (b_2 - b_1) t."""
    tree = dataclasses.replace(
        build(leaf(0, 1), leaf(-0.5, 1)), var=None, cov=np.array([[1.0, -0.4], [-0.4, 2.0]])
    )
    row = CorrelatedBackup(tree, 0.0).crossings()
    np.testing.assert_allclose(row.crossing, [-0.5 / 1.4, 0.5 / (2.4 / math.sqrt(2))], rtol=CLOSED_FORM)
    np.testing.assert_allclose(row.slope, [1.4, 2.4 / math.sqrt(2)], rtol=CLOSED_FORM)
    np.testing.assert_array_equal(row.bend, 0.0)


def slopes(b: CorrelatedBackup) -> np.ndarray:
    """d E[Q_a] along every candidate's column of the covariance, (n_actions, n_leaves), as rows use it."""
    return np.array([x.slope for x in b._actions])


def test_the_slope_of_a_candidate_is_what_the_weights_make_of_a_column_of_the_covariance():
    tree = drawn("shared-aisles", 2)
    b = CorrelatedBackup(tree)
    along = tree.cov / np.sqrt(np.diag(tree.cov))
    np.testing.assert_allclose(
        slopes(b), b.influence() @ along, rtol=CLOSED_FORM, atol=CLOSED_FORM * scale_of(tree)
    )
    i, d = 1, 1e-4
    moved = CorrelatedBackup(tree)
    moved.update(tree.mean + d * along[:, i], tree.cov)
    np.testing.assert_allclose(
        (moved.value - b.value) / d, slopes(b)[:, i], rtol=FINITE_DIFFERENCE, atol=FINITE_DIFFERENCE
    )


def test_one_observation_can_raise_one_rival_and_lower_another():
    cov = np.array([[0.01, 0.0, 0.0], [0.0, 1.0, -0.9], [0.0, -0.9, 1.0]])
    tree = dataclasses.replace(build(leaf(0.5, 1), leaf(0.0, 1), leaf(-0.2, 1)), var=None, cov=cov)
    row = CorrelatedBackup(tree).crossings()
    assert row.crossing[1] > 0 > row.other_crossing[1]
    assert row.slope[1] > 0
    assert row.other_slope[1] > 0


# --- what must not change it, and extremes ---------------------------------------------------------


@settings(deadline=None, max_examples=20, derandomize=True)
@given(
    seeds,
    st.sampled_from(["crossing-traffic", "shared-aisles"]),
    st.sampled_from([1e-6, 1.0, 1e6]),
    st.sampled_from([0.0, -1e3, 1e6]),
)
def test_scale_and_shift_change_units_only(seed, family, scale, shift):
    tree = drawn(family, seed)
    a, b = backup_of(tree).rows(), backup_of(shifted(tree, scale, shift)).rows()
    units = dict.fromkeys(("slope", "other_slope", "spread", "cost"), scale)
    for name, x in a.items():
        if name in ("bend", "now"):  # a ratio of two small numbers where the slope is next to nothing
            x, b[name] = x[a["slope"] > 1e-6], b[name][a["slope"] > 1e-6]
        np.testing.assert_allclose(
            b[name], x * units.get(name, 1.0), rtol=RELATIVE_TAIL, atol=RELATIVE_TAIL * units.get(name, 1.0)
        )


@pytest.mark.parametrize("offset", [1e3, -1e6, 1e9])
def test_a_maximum_of_two_keeps_its_variance_far_from_0(offset):
    """The moments are taken from the larger mean on: means that a double holds exactly change no bit."""
    for gap in (0.0, 0.5, 3.0):
        near, far = (build(("max", [leaf(at + gap, 1), leaf(at, 2)]), leaf(at, 1)) for at in (0.0, offset))
        pairs = [(Backup(near), Backup(far)), (CompiledBackup(near), CompiledBackup(far))]
        dense = [dataclasses.replace(t, var=None, cov=np.diag(t.var)) for t in (near, far)]
        pairs.append((CorrelatedBackup(dense[0]), CorrelatedBackup(dense[1])))
        for a, b in pairs:
            assert a.value_var[0] > 0.5
            np.testing.assert_allclose(b.value_var, a.value_var, rtol=EXACT, atol=EXACT)


@settings(deadline=None, max_examples=15, derandomize=True)
@given(seeds, st.floats(-12, 12), st.floats(-8, 8), st.sampled_from(HORIZONS), st.booleans())
def test_decades_give_finite_rows(seed, scale, spread, horizon, correlated):
    rng = np.random.default_rng(seed)
    tree = drawn("crossing-traffic", seed)
    n = tree.n_leaves
    var = 10.0 ** (scale + spread * rng.random(n)) * (rng.random(n) < 0.8)
    changes = {"mean": tree.mean * 10.0 ** (scale / 2 + rng.uniform(-3, 3)), "var": var}
    if correlated:
        changes = {"mean": changes["mean"], "var": None, "cov": np.diag(var)}
    tree = dataclasses.replace(tree, noise_var=10.0 ** (scale + rng.uniform(-8, 8, n)), **changes)
    b = backup_of(tree, horizon)
    assert np.all(np.isfinite(b.value))
    for name, x in b.rows().items():
        assert np.all(np.isfinite(x)), name
    assert np.all(b.rows()["slope"] >= 0)
    assert np.all(b.rows()["slope"][var == 0] == 0)


def test_one_action_one_leaf_and_thousands_of_leaves():
    assert np.all(Backup(build(leaf(0, 1))).rows()["slope"] == 0)
    assert np.all(Backup(build(("max", [leaf(0, 1), leaf(1, 1)]))).rows()["slope"] == 0)
    dense = dataclasses.replace(build(leaf(0, 1)), var=None, cov=np.eye(1))
    assert np.all(CorrelatedBackup(dense).rows()["slope"] == 0)
    wide = Backup(build(*[("max", [leaf(0.1 * (i % 7), 1 + j) for j in range(64)]) for i in range(64)]))
    assert all(np.all(np.isfinite(x)) for x in wide.rows().values())


def test_bad_updates_are_named():
    b = Backup(build(leaf(0, 1), leaf(1, 1)))
    with pytest.raises(InputError, match="leaf: must be from 0 to 1"):
        b.update(2, mean=0.0)
    with pytest.raises(InputError, match="alpha: must be among mean, var"):
        b.update(0, alpha=1.0)
    with pytest.raises(InputError, match="var: must be finite"):
        b.update(0, var=-1.0)
    with pytest.raises(InputError, match="var: must be finite"):
        b.update(0, mean=9.0, var=-1.0)
    b.update(0, var=1.0)  # nothing of a refused belief stays
    assert b.value.tolist() == [0.0, 1.0]
    with pytest.raises(RefusedError, match="independent leaves"):
        Backup(drawn("shared-aisles", 0))
    with pytest.raises(RefusedError, match="'cov'"):
        CorrelatedBackup(build(leaf(0, 1)))


@pytest.mark.parametrize(
    ("belief", "message"),
    [
        ({"alpha": 0.0, "beta": 1.0}, "alpha: must be above 0; got 0"),
        ({"beta": 0.0}, "beta: must be above 0"),
        ({"low": 2.0}, "high: must be above low"),
        ({"high": -1.0, "low": -1.0}, "high: must be above low"),
    ],
)
def test_beliefs_that_no_tree_may_hold_are_refused_and_nothing_is_kept(belief, message):
    tree = from_record(
        {
            "format": "belief-tree/1", "parent": [-1, 0, 0], "kind": ["decision", "leaf", "leaf"],
            "alpha": [None, 1, 2], "beta": [None, 1, 1], "low": [None, 0, 0], "high": [None, 1, 1],
        }
    )  # fmt: skip
    backup = Backup(tree)
    before = backup.rows()
    with pytest.raises(InputError, match=message):
        backup.update(0, **belief)
    for name, column in backup.rows().items():
        np.testing.assert_array_equal(column, before[name])
