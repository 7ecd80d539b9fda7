"""The compiled backup is the NumPy one, faster: the same numbers after any updates, and at extremes.

`distill.backup` is the definition, tested by itself in test_backup.py.
"""

from __future__ import annotations

import copy
import dataclasses
import math
import subprocess
import sys
import time
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from chance_trees import build, leaf, random_sketch
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import BACKUP_COMPILED, CLOSED_FORM, EXACT

from distill import normal_fits, normal_fits_compiled, schema
from distill.backup import Backup
from distill.backup_compiled import CompiledBackup, fast_backup_of
from distill.backup_correlated import CorrelatedBackup
from distill.errors import InputError, RefusedError
from distill.family import draw, load_family
from distill.tree import BeliefTree

ROOT = Path(__file__).parents[1]
FAMILIES = ROOT / "datasets" / "families"
HORIZONS = (math.inf, 0.0, 7.0)
INDEPENDENT = {
    name: load_family(FAMILIES / f"{name}.toml") for name in ("cold-store", "crossing-traffic", "on-time")
}

seeds = st.integers(0, 2**31 - 1)


def sketched(rng: np.random.Generator) -> BeliefTree:
    """A random tree: decision and chance nodes at any level, only children, sure leaves, 1 to 4 actions."""
    return build(*[random_sketch(rng, 3, 4) for _ in range(rng.integers(1, 5))])


def decades(tree: BeliefTree, rng: np.random.Generator) -> BeliefTree:
    """The same tree over 24 decades of variance as a whole and up to 8 within, a fifth of it sure."""
    n = tree.n_leaves
    scale, spread = rng.uniform(-12, 12), rng.uniform(-8, 8)
    assert tree.mean is not None
    return dataclasses.replace(
        tree,
        mean=tree.mean * 10.0 ** (scale / 2 + rng.uniform(-3, 3)),
        var=10.0 ** (scale + spread * rng.random(n)) * (rng.random(n) < 0.8),
        noise_var=10.0 ** (scale + rng.uniform(-8, 8, n)),
    )


def wild(rng: np.random.Generator) -> BeliefTree:
    """Ties, means over 12 and variances over 16 decades side by side, probabilities 0, a shift of all."""

    def node(depth: int) -> Any:
        if depth == 0 or rng.random() < 0.2:
            mean = rng.choice([0.0, 1.0, rng.normal(), rng.normal() * 10 ** rng.uniform(-6, 6)])
            var = 0.0 if rng.random() < 0.25 else 10 ** rng.uniform(-8, 8)
            return leaf(float(mean), float(var), float(10 ** rng.uniform(-8, 8)))
        children = [node(depth - 1) for _ in range(rng.integers(1, 6))]
        if rng.random() < 0.6:
            return ("max", children)
        p = rng.dirichlet(np.ones(len(children)))
        if len(p) > 1 and rng.random() < 0.4:
            p[:2] = 0.0, p[:2].sum()
        p[-1] = max(1 - p[:-1].sum(), 0.0)
        return ("mean", [(float(share), child) for share, child in zip(p, children, strict=True)])

    tree = build(*[node(3) for _ in range(rng.integers(1, 5))])
    shift = float(rng.choice([0.0, 1e6]))
    return dataclasses.replace(tree, reward=np.where(tree.parent == 0, tree.reward + shift, tree.reward))


def state(b: Backup) -> dict[str, np.ndarray]:
    """All that a backup tells."""
    told = {"mean": b.mean, "var": b.var, "value": b.value, "value_var": b.value_var}
    crossings = {
        f"crossings {f.name}": getattr(b.crossings(), f.name) for f in dataclasses.fields(b.crossings())
    }
    return {**told, "influence": b.influence(), **b.rows(), **crossings}


def assert_same(found: Backup, expected: Backup, rtol: float = BACKUP_COMPILED) -> None:
    got, wanted = state(found), state(expected)
    assert list(got) == list(wanted)
    for name, x in wanted.items():
        assert got[name].shape == x.shape
        np.testing.assert_allclose(got[name], x, rtol=rtol, atol=0, err_msg=name)


def assert_same_passes(found: Backup, expected: Backup) -> None:
    """Each pass by itself, from the same numbers.

    Move, slope and bend follow (target - others) / theta. Where sds are far below the means beside them, or a
    crossing is far in the tail of the siblings' maximum, a rounding of a mean is a large part of that, and
    whole rows may differ. The moments still agree within roundings of what goes into them, and from the same
    moments the pass down gives the same rows.
    """
    for c in range(1, len(expected.mean)):
        kids = expected._kids[c]
        if kids is None:
            continue
        m = np.abs(expected._reward[kids]) + np.abs(expected._gain[kids] * expected.mean[kids])
        sds = 12 * np.sum(expected._gain[kids] * np.sqrt(expected.var[kids]))  # a table is that wide at most
        size = m.sum() + sds
        units = {"mean": size, "_others": size, "var": size * sds, "_others_var": size * sds}
        for name, unit in units.items():
            at = kids if name.startswith("_") else c
            off = np.abs(getattr(found, name)[at] - getattr(expected, name)[at])
            assert np.all(off <= CLOSED_FORM * unit), (name, c)
    for name in ("mean", "var", "_others", "_others_var"):
        getattr(found, name)[:] = getattr(expected, name)
    assert_same(found, expected)


def updated(tree: BeliefTree, backups: list[Backup], rng: np.random.Generator, times: int) -> BeliefTree:
    """Gives the same random beliefs to all backups; returns the tree that holds them."""
    names = schema.GAUSSIAN_COLUMNS[:2] if tree.mean is not None else schema.WIN_LOSS_COLUMNS[:2]
    columns = {name: np.array(getattr(tree, name)) for name in names}
    for _ in range(times):
        i = int(rng.integers(tree.n_leaves))
        belief = {name: float(abs(x[i]) + 0.1 + rng.gamma(1, 1)) for name, x in columns.items()}
        if "var" in belief:
            belief["mean"] *= float(rng.choice([-1.0, 1.0]))
            belief["var"] *= float(rng.choice([0.0, 1.0]))
        for b in backups:
            b.update(i, **belief)
        for name, x in belief.items():
            columns[name][i] = x
    return dataclasses.replace(tree, **columns)


# --- the same numbers ------------------------------------------------------------------------------


@settings(deadline=None, max_examples=40, derandomize=True)
@given(seeds, st.sampled_from([*INDEPENDENT, "sketched"]), st.sampled_from(HORIZONS), st.integers(0, 12))
def test_after_any_updates_it_is_a_new_reference_backup(seed, source, horizon, times):
    rng = np.random.default_rng(seed)
    tree = sketched(rng) if source == "sketched" else draw(INDEPENDENT[source], seed, 0)
    kept = CompiledBackup(tree, horizon)
    assert_same(kept, Backup(tree, horizon))
    now = updated(tree, [kept], rng, times)
    assert_same(kept, Backup(now, horizon))
    assert_same(kept, CompiledBackup(now, horizon), EXACT)


@settings(deadline=None, max_examples=40, derandomize=True)
@given(seeds, st.booleans(), st.sampled_from(HORIZONS))
def test_decades_of_scale_and_of_variance_ratio(seed, family, horizon):
    rng = np.random.default_rng(seed)
    tree = draw(INDEPENDENT["crossing-traffic"], seed, 0) if family else sketched(rng)
    tree = decades(tree, rng)
    assert_same(CompiledBackup(tree, horizon), Backup(tree, horizon))


@settings(deadline=None, max_examples=60, derandomize=True)
@given(seeds, st.sampled_from(HORIZONS))
def test_each_pass_is_the_reference_where_cancellation_magnifies_roundings(seed, horizon):
    rng = np.random.default_rng(seed)
    tree = wild(rng)
    kept = CompiledBackup(tree, horizon)
    now = updated(tree, [kept], rng, 3)
    assert_same_passes(kept, Backup(now, horizon))


def test_the_scalar_fits_are_the_array_ones():
    x = np.r_[np.linspace(-36.5, 36.5, 2001), -1e-9, 0.0, 1e-300]
    y = np.r_[10.0 ** np.linspace(-299, 12, 2001), 0.0, 0.3]
    for name, at in (("norm_pdf", x), ("norm_cdf", x), ("unit_gain", x), ("inverse_gain", y)):
        array, scalar = getattr(normal_fits, name), getattr(normal_fits_compiled, name)
        found = np.array([scalar(float(z)) for z in at])
        np.testing.assert_allclose(found, array(at), rtol=CLOSED_FORM, atol=CLOSED_FORM * (name[:3] == "inv"))


# --- extremes --------------------------------------------------------------------------------------

SHAPES = {
    "one leaf": build(leaf(0.3, 1.0)),
    "one action": build(("max", [leaf(0, 1), leaf(1, 2), leaf(2, 0)])),
    "an only child": build(("max", [("mean", [(1.0, ("max", [leaf(0, 1)]))])]), leaf(0.1, 1)),
    "all sure": build(("max", [leaf(1, 0), leaf(1, 0), leaf(0, 0)]), leaf(0.5, 0), leaf(1, 0)),
    "one tie": build(("max", [leaf(1, 1), leaf(1, 1), leaf(1, 1)]), ("max", [leaf(1, 1), leaf(1, 1)])),
    "probability 0": build(
        ("mean", [(0.0, ("max", [leaf(0, 1), leaf(1, 1)])), (1.0, leaf(0, 1))]), leaf(1, 1)
    ),
    "a sure 0 far off": build(
        ("mean", [(1e-3, ("max", [leaf(0, 0), leaf(0.6, 0)])), (0.999, leaf(0, 1))]), leaf(1e7, 1), leaf(0, 1)
    ),
    "merged decisions": build(
        ("edge", 1.0, 0.9, ("max", [("edge", -0.2, 0.8, ("max", [leaf(0, 1), leaf(1, 2)])), leaf(0.4, 1)])),
        ("mean", [(0.4, ("edge", 0.5, 0.7, leaf(1, 1))), (0.6, leaf(0, 2))]),
    ),
}


@pytest.mark.parametrize("horizon", HORIZONS)
@pytest.mark.parametrize("shape", SHAPES)
def test_shapes_of_trees(shape, horizon):
    tree = SHAPES[shape]
    assert_same_passes(CompiledBackup(tree, horizon), Backup(tree, horizon))
    kept = CompiledBackup(tree, horizon)
    assert all(np.all(np.isfinite(x)) for x in kept.rows().values())
    now = updated(tree, [kept], np.random.default_rng(1), 6)
    assert_same_passes(kept, Backup(now, horizon))


def test_thousands_of_leaves():
    rng = np.random.default_rng(0)
    group = [
        (
            "max",
            [leaf(float(m), float(v)) for m, v in zip(rng.normal(size=64), rng.gamma(1, 1, 64), strict=True)],
        )
        for _ in range(64)
    ]
    mixed = [("mean", [(0.5, a), (0.5, b)]) for a, b in zip(group[:32], group[32:], strict=True)]
    tree = build(*mixed)
    assert tree.n_leaves == 4096
    kept = CompiledBackup(tree, 7.0)
    now = updated(tree, [kept], rng, 5)
    assert_same(kept, Backup(now, 7.0))


# --- as a Backup is used ---------------------------------------------------------------------------


def test_rows_are_new_columns_each_time():
    tree = draw(INDEPENDENT["crossing-traffic"], 3, 0)
    b = CompiledBackup(tree)
    before = b.rows()
    kept = {name: x.copy() for name, x in before.items()}
    b.update(0, mean=9.0, var=0.3)
    assert not np.array_equal(b.rows()["crossing"], kept["crossing"])
    for name, x in kept.items():
        np.testing.assert_array_equal(before[name], x)
        assert before[name].flags.c_contiguous or name == "cost"


def test_a_copy_goes_its_own_way():
    tree = draw(INDEPENDENT["on-time"], 2, 0)
    b = CompiledBackup(tree)
    other = copy.deepcopy(b)
    now = updated(tree, [other], np.random.default_rng(0), 3)
    assert_same(other, Backup(now))
    assert_same(b, Backup(tree))


def test_a_horizon_set_later_counts_from_the_next_update():
    tree = draw(INDEPENDENT["crossing-traffic"], 5, 0)
    found, expected = CompiledBackup(tree), Backup(tree)
    found.horizon = expected.horizon = 3
    updated(tree, [found, expected], np.random.default_rng(0), 4)
    assert_same(found, expected)


def test_bad_updates_are_named_and_correlated_trees_get_their_own():
    b = CompiledBackup(build(leaf(0, 1), leaf(1, 1)))
    with pytest.raises(InputError, match="leaf: must be from 0 to 1"):
        b.update(2, mean=0.0)
    with pytest.raises(InputError, match="alpha: must be among mean, var"):
        b.update(0, alpha=1.0)
    with pytest.raises(InputError, match="var: must be finite"):
        b.update(0, var=-1.0)
    with pytest.raises(InputError, match="var: must be finite"):
        b.update(0, mean=9.0, var=-1.0)
    b.update(0, var=0.5)  # nothing of a refused belief stays
    assert_same(b, Backup(build(leaf(0, 0.5), leaf(1, 1))))
    dense = draw(load_family(FAMILIES / "shared-aisles.toml"), 0, 0)
    with pytest.raises(RefusedError, match="independent leaves"):
        CompiledBackup(dense)
    assert isinstance(fast_backup_of(dense), CorrelatedBackup)
    assert isinstance(fast_backup_of(build(leaf(0, 1)), 2.0), CompiledBackup)
    assert fast_backup_of(build(leaf(0, 1)), 2.0).horizon == 2.0


def test_the_definition_needs_no_compiler():
    code = "import sys; sys.modules['numba'] = None; import distill.backup, distill.record_rows"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr


def test_the_extra_for_it_asks_for_the_numba_of_the_heavy_side():
    extras = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]["optional-dependencies"]
    assert [x for x in extras["train"] if x.startswith("numba")] == extras["fast"]


def test_it_takes_a_small_part_of_the_time():
    """About a thirtieth; of the best of interleaved calls a quarter is asked."""
    trees = [draw(INDEPENDENT["crossing-traffic"], 5, i) for i in range(3)]
    for tree in trees:
        assert tree.mean is not None
        assert tree.var is not None
        best = {}
        backups = (Backup(tree), CompiledBackup(tree))
        for turn in range(60):
            i = turn % tree.n_leaves
            for b in backups:
                start = time.perf_counter_ns()
                b.update(i, mean=float(tree.mean[i]), var=float(tree.var[i]))
                b.rows()
                spent = time.perf_counter_ns() - start
                best[type(b)] = min(spent, best.get(type(b), spent))
        assert 4 * best[CompiledBackup] < best[Backup]
