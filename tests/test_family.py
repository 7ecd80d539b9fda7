from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, STANDARD_ERRORS

from distill import schema
from distill.errors import InputError
from distill.family import draw, load_family, parse_family
from distill.family_file import Distribution
from distill.record import from_record, to_record
from distill.tree import leaf_table

FAMILIES = Path(__file__).parent.parent / "datasets" / "families"
ALL = sorted(p.stem for p in FAMILIES.glob("*.toml"))

SMALL = """
format = "tree-family/1"
name = "small"
belief = "gaussian"
shape = { actions = 3, leaves = [2, 4], depth = 3, branching = 2 }
prior = { sd = 1 }
noise = { sd = 2 }
budget = { rollouts = 20, used = 0.5 }
search = { even = 1 }
"""
COINS = """
format = "tree-family/1"
name = "coins"
belief = "win_loss"
shape = { actions = 2, leaves = 1 }
prior = { strength = 2, win_rate = 0.5 }
budget = { rollouts = 20, used = 0.5 }
search = { even = 1 }
"""


def family_text(text=SMALL, **changed):
    """`text` with lines replaced by key (None removes one), or added."""
    lines = [x for x in text.strip().splitlines() if x.split(" = ")[0] not in changed]
    lines += [f"{key} = {value}" for key, value in changed.items() if value is not None]
    return "\n".join(lines)


def _family(text=SMALL, **changed):
    return parse_family(family_text(text, **changed).encode(), "f.toml")


# --- the file --------------------------------------------------------------------------------------

BAD = {
    "no toml": ("name = ", "f.toml: must be valid TOML"),
    "format missing": ({"format": None}, "f.toml: format: is missing"),
    "format other": ({"format": '"tree-family/9"'}, "f.toml: format: must be 'tree-family/1'"),
    "name empty": ({"name": '""'}, "f.toml: name: must be text"),
    "name of two lines": ({"name": '"a\\nb"'}, "f.toml: name: must be one printable line"),
    "name number": ({"name": "7"}, "f.toml: name: must be text; got 7"),
    "belief other": ({"belief": '"coin"'}, "f.toml: belief: must be one of gaussian, win_loss"),
    "belief list": ({"belief": "[1]"}, "f.toml: belief: must be text"),
    "unknown key": ({"shapes": "{}"}, "f.toml: key 'shapes': is not a key"),
    "unknown field": ({"noise": "{ sd = 1, mean = 0 }"}, "f.toml: key 'noise.mean': is not a key"),
    "section missing": ({"noise": None}, "f.toml: noise: is missing"),
    "section no table": ({"noise": "3"}, "f.toml: noise: must be a table; got 3"),
    "field missing": ({"noise": "{}"}, "f.toml: noise.sd: is missing"),
    "text for number": ({"noise": '{ sd = "1" }'}, "f.toml: noise.sd: must be a number; got '1'"),
    "true for number": ({"noise": "{ sd = true }"}, "f.toml: noise.sd: must be a number; got True"),
    "date for number": ({"noise": "{ sd = 2020-01-01 }"}, "f.toml: noise.sd: must be a number"),
    "nan": ({"noise": "{ sd = nan }"}, "f.toml: noise.sd: must be finite; got nan"),
    "infinite": ({"noise": "{ sd = [1, inf] }"}, "f.toml: noise.sd[1]: must be finite; got inf"),
    "huge whole number": ({"noise": "{ sd = 1" + "0" * 400 + " }"}, "f.toml: noise.sd: must be finite"),
    "zero noise": ({"noise": "{ sd = 0 }"}, "f.toml: noise.sd: must be at least 1e-09"),
    "negative sd": ({"prior": "{ sd = [-1, 1] }"}, "f.toml: prior.sd: must be at least 0 and at most 1e+09"),
    "normal sd": ({"prior": "{ sd = { normal = [1, 1] } }"}, "f.toml: prior.sd: must not be normal"),
    "normal, negative": (
        {"prior": "{ sd = 1, mean = { normal = [0, -1] } }"},
        "prior.mean.normal[1]: must be",
    ),
    "one number": ({"prior": "{ sd = [1] }"}, "f.toml: prior.sd: must be two numbers; got [1]"),
    "upside down": ({"prior": "{ sd = [2, 1] }"}, "f.toml: prior.sd: must have its first number at most"),
    "log of zero": (
        {"prior": "{ sd = { log_uniform = [0, 1] } }"},
        "prior.sd.log_uniform[0]: must be above 0",
    ),
    "two kinds": (
        {"prior": "{ sd = { uniform = [0, 1], choice = [1] } }"},
        "prior.sd: must have exactly one",
    ),
    "unknown kind": ({"prior": "{ sd = { gamma = [0, 1] } }"}, "prior.sd: must have exactly one"),
    "no choice": ({"prior": "{ sd = { choice = [] } }"}, "prior.sd.choice: must be a list of numbers"),
    "weights short": (
        {"prior": "{ sd = { choice = [1, 2], weights = [1] } }"},
        "prior.sd.weights: must be 2",
    ),
    "weights zero": ({"prior": "{ sd = { choice = [1], weights = [0] } }"}, "prior.sd.weights: must not all"),
    "weights nan": (
        {"prior": "{ sd = { choice = [1], weights = [nan] } }"},
        "prior.sd.weights[0]: must be fin",
    ),
    "weights astray": (
        {"prior": "{ sd = { uniform = [1, 2], weights = [1, 1] } }"},
        "prior.sd.weights: must st",
    ),
    "half an action": ({"shape": "{ actions = 2.5, leaves = 1 }"}, "shape.actions: must be a whole number"),
    "no action": ({"shape": "{ actions = 0, leaves = 1 }"}, "shape.actions: must be at least 1"),
    "too many leaves": ({"shape": "{ actions = 1000, leaves = 1000 }"}, "shape.leaves: times shape.actions"),
    "too many correlated": (
        {"shape": "{ actions = 50, leaves = 50 }", "correlation": "{ shared = 0.5 }"},
        "shape.leaves: times shape.actions must be at most 1024",
    ),
    "discount": (
        {"edge": "{ discount = 1.5 }"},
        "edge.discount: must be at least 0.001 and at most 1; got 1.5",
    ),
    "used": ({"budget": "{ rollouts = 9, used = 2 }"}, "budget.used: must be at least 0 and at most 1"),
    "plain number": (
        {"budget": "{ rollouts = 9, used = 1, fresh = [0, 1] }"},
        "budget.fresh: must be a number; got [0, 1]",
    ),
    "no rule": ({"search": "{ even = 0 }"}, "f.toml: search: must give some allocation rule"),
    "other belief's": ({"correlation": "3", "belief": '"win_loss"'}, "f.toml: key 'noise': is not a key"),
}


@pytest.mark.parametrize("change, message", BAD.values(), ids=BAD.keys())
def test_bad_families_are_named_in_one_line(change, message):
    with pytest.raises(InputError) as e:
        if isinstance(change, str):
            parse_family(change.encode(), "f.toml")
        else:
            _family(**change)
    assert message in str(e.value)
    assert str(e.value).startswith("f.toml: ")
    assert "\n" not in str(e.value)
    assert len(str(e.value)) < 250


def test_bad_bytes_and_missing_files_are_named(tmp_path):
    with pytest.raises(InputError, match=r"f.toml: byte 1: must be UTF-8 text"):
        parse_family(b"a\xff", "f.toml")
    with pytest.raises(InputError, match=r"gone.toml: must be a readable file \(No such file"):
        load_family(tmp_path / "gone.toml")
    with pytest.raises(InputError, match="must be valid TOML"):
        parse_family(b"a = " + b"[" * 100_000, "f.toml")


def test_damaged_files_are_read_or_refused_in_one_line():
    """Bytes changed, cut out and doubled at random: a family or one short InputError, nothing else."""
    rng = np.random.default_rng(0)
    original = (FAMILIES / "cold-store.toml").read_bytes()
    refused = 0
    for _ in range(600):
        data = bytearray(original)
        for _ in range(rng.integers(1, 4)):
            at, size = rng.integers(len(data)), int(rng.integers(1, 20))
            how = rng.integers(3)
            if how == 0:
                data[at] = rng.integers(256)
            elif how == 1:
                del data[at : at + size]
            else:
                data[at:at] = data[at : at + size]
        try:
            family = parse_family(bytes(data), "f.toml")
            assert family.belief == "gaussian"
        except InputError as e:
            refused += 1
            assert str(e).startswith("f.toml: ")
            assert "\n" not in str(e)
            assert len(str(e)) < 500
    assert 200 < refused < 600


def test_win_loss_span_must_not_drown_in_its_low():
    with pytest.raises(InputError, match=r"prior.span: must be at least 1e-9 of prior.low's size, 1e\+06"):
        _family(COINS, prior="{ strength = 2, win_rate = 0.5, low = -1e6, span = 1e-6 }")


# --- distributions ---------------------------------------------------------------------------------


def test_whole_numbers_come_equally_often():
    x = Distribution("uniform", (2, 6), whole=True).draw(np.random.default_rng(0), 20_000)
    share = np.bincount(x.astype(int), minlength=7)[2:] / len(x)
    assert np.all(np.abs(share - 0.2) < STANDARD_ERRORS * math.sqrt(0.16 / len(x)))


def test_choices_come_by_weight():
    x = Distribution("choice", (5.0, 7.0, 9.0), shares=(1.0, 1.0, 4.0)).draw(np.random.default_rng(0), 20_000)
    assert set(x) == {5.0, 9.0}
    assert abs(np.mean(x == 9) - 0.75) < STANDARD_ERRORS * math.sqrt(0.1875 / len(x))


@pytest.mark.parametrize("whole", [False, True])
def test_log_uniform_spreads_evenly_over_decades(whole):
    x = Distribution("log_uniform", (1, 10_000), whole).draw(np.random.default_rng(0), 20_000)
    share = np.mean(x < 100)
    assert abs(share - 0.5) < STANDARD_ERRORS * math.sqrt(0.25 / len(x))
    assert x.min() >= 1
    assert x.max() <= 10_000
    assert not whole or np.all(x == np.floor(x))


def test_a_number_alone_uses_no_randomness():
    rng = np.random.default_rng(0)
    before = rng.bit_generator.state
    assert Distribution("uniform", (3.0, 3.0)).draw(rng, 2).tolist() == [3.0, 3.0]
    assert rng.bit_generator.state == before


# --- draws -----------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ALL)
def test_committed_families_draw_valid_records(name):
    """Every draw passes the record's full validation, and comes back from it bit for bit."""
    family = load_family(FAMILIES / f"{name}.toml")
    assert family.name == name
    for i in range(150):
        tree = draw(family, 1, i)
        back = from_record(to_record(tree))
        for key, value in vars(tree).items():
            assert np.array_equal(value, getattr(back, key)), key
        assert tree.remaining >= 1
        lo, hi = family["budget.rollouts"].support
        assert lo <= tree.remaining + tree.count.sum() <= hi
        lo, hi = family["shape.actions"].support
        assert lo <= len(tree.action_nodes) <= hi


def test_draws_depend_on_seed_and_index_alone():
    family = load_family(FAMILIES / "cold-store.toml")
    again = load_family(FAMILIES / "cold-store.toml")
    forward = [to_record(draw(family, 3, i)) for i in range(20)]
    backward = [to_record(draw(again, 3, i)) for i in reversed(range(20))][::-1]
    assert forward == backward
    assert to_record(draw(family, 4, 0)) != forward[0]
    assert len({str(r) for r in forward}) == 20


def test_shapes_keep_their_bounds():
    family = load_family(FAMILIES / "cold-store.toml")
    leaves, depths = set(), set()
    for i in range(400):
        tree = draw(family, 0, i)
        table = leaf_table(tree)
        depth = np.zeros(tree.n_nodes, dtype=int)
        for v in range(1, tree.n_nodes):
            depth[v] = depth[tree.parent[v]] + 1
        leaves |= set(np.bincount(table.action).tolist())
        depths.add(int(depth.max()))
        branching = np.bincount(tree.parent[1:])
        assert np.all(branching[1:][branching[1:] > 0] >= 2)
    assert leaves == set(range(1, 13))
    assert depths == {1, 2, 3, 4} or depths == {2, 3, 4}


def test_draws_cover_fresh_half_searched_and_late_trees():
    family = load_family(FAMILIES / "cold-store.toml")
    trees = [draw(family, 0, i) for i in range(400)]
    used = np.array([t.count.sum() / (t.count.sum() + t.remaining) for t in trees])
    assert np.mean(used == 0) > 0.04
    for low in (0.0, 0.25, 0.5, 0.75):
        assert np.mean((used >= low) & (used < low + 0.25)) > 0.15
    # A search concentrates: where much is spent, some leaves have many rollouts and some few.
    late = [t for t in trees if t.count.sum() > 10 * t.n_leaves]
    assert len(late) > 20
    assert np.median([t.count.max() / max(t.count.mean(), 1) for t in late]) > 2


def test_fresh_trees_show_the_prior():
    family = _family(
        prior="{ scale = 10, action = { normal = [1, 0.5] }, mean = { normal = [0, 2] }, sd = 3 }",
        edge="{ reward = { normal = [0, 0.1] }, discount = 0.5 }",
        budget="{ rollouts = 9, used = 1, fresh = 1 }",
        cost="{ tree = 0.01, leaf = [1, 3] }",
    )
    trees = [draw(family, 0, i) for i in range(800)]
    first = np.array([t.mean[0] for t in trees])
    assert abs(first.mean() - 10) < STANDARD_ERRORS * first.std() / math.sqrt(len(first))
    spread = math.hypot(5, 20)
    assert abs(first.std() - spread) < STANDARD_ERRORS * spread / math.sqrt(2 * len(first))
    for t in trees[:20]:
        assert np.all(t.count == 0)
        assert t.var.tolist() == pytest.approx([900.0] * t.n_leaves, rel=CLOSED_FORM)
        assert t.noise_var.tolist() == pytest.approx([400.0] * t.n_leaves, rel=CLOSED_FORM)
        assert np.all(t.discount[1:] == 0.5)
        assert np.all((t.cost >= 0.1 * (1 - CLOSED_FORM)) & (t.cost <= 0.3 * (1 + CLOSED_FORM)))
    rewards = np.concatenate([t.reward[1:] for t in trees])
    assert abs(rewards.std() - 1) < STANDARD_ERRORS / math.sqrt(2 * len(rewards))


def test_correlation_comes_from_shared_ancestors():
    """Leaves of one inner node share `shared` of their variance; leaves of two actions nothing."""
    family = _family(
        shape="{ actions = 2, leaves = 4, depth = 3, branching = 2 }",
        correlation="{ shared = 0.6 }",
        budget="{ rollouts = 9, used = 0 }",
    )
    tree = next(t for t in (draw(family, 0, i) for i in range(50)) if t.n_nodes == 15)  # both fully split
    parent = tree.parent[tree.leaf_nodes]
    grand = tree.parent[parent]
    for i in range(tree.n_leaves):
        for j in range(tree.n_leaves):
            if i == j:
                expected = 1.0
            elif parent[i] == parent[j]:
                expected = 0.6
            elif grand[i] == grand[j]:
                expected = 0.3
            else:
                expected = 0.0
            assert tree.cov[i, j] == pytest.approx(expected, rel=CLOSED_FORM)


def test_chance_nodes_come_as_often_as_asked():
    family = _family(chance="{ share = 0.3, evenness = 2 }")
    inner = chance = 0
    for i in range(400):
        tree = draw(family, 0, i)
        below = tree.kind[1:]
        inner += int(np.sum(below != schema.LEAF))
        chance += int(np.sum(below == schema.CHANCE))
    assert abs(chance / inner - 0.3) < STANDARD_ERRORS * math.sqrt(0.21 / inner)


def test_win_loss_draws_count_wins():
    tree = draw(_family(COINS, prior="{ strength = 4, win_rate = 0.25, low = -1, span = 3 }"), 0, 0)
    assert tree.belief == "win_loss"
    assert (tree.alpha + tree.beta - 4).tolist() == tree.count.tolist()
    assert np.all(tree.alpha - 1 == np.floor(tree.alpha - 1))
    assert (tree.low.tolist(), tree.high.tolist()) == ([-1, -1], [2, 2])


def test_horizons_can_be_drawn():
    family = _family(budget="{ rollouts = 20, used = 0.5, horizon = { choice = [0, 4] } }")
    assert {draw(family, 0, i).horizon for i in range(30)} == {0.0, 4.0}


positive = st.floats(1e-9, 1e9)


@settings(deadline=None, max_examples=40, derandomize=True)
@given(positive, positive, positive, st.integers(0, 1000), st.booleans(), st.booleans())
def test_extreme_fields_still_give_valid_records(scale, sd, noise, index, correlated, chance):
    """18 decades each of scale, spread and noise, together."""
    family = _family(
        prior=f"{{ scale = {scale!r}, sd = {sd!r}, mean = {{ normal = [0, 1] }} }}",
        noise=f"{{ sd = {noise!r} }}",
        correlation="{ shared = 1 }" if correlated else None,
        chance="{ share = 0.5, evenness = 0.001 }" if chance else None,
        search="{ even = 1, uct = 1, thompson = 1, static_rate = 1, switch = 0.5 }",
    )
    tree = draw(family, 0, index)
    assert from_record(to_record(tree)).n_leaves == tree.n_leaves
