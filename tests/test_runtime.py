"""The scorer in an agent: what it accepts, what it refuses, and what it does where the file has no answer."""

from __future__ import annotations

import gc
import os
import threading
import time

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ladder import CLOSED_FORM, EXACT, FLOAT_COLUMNS, ONNX_ELSEWHERE
from leaf_tables import NAMES, rows, table
from scorers import KINDS, arguments, fitted, graph, scorer_bytes, training, without_upper_bound

from distill.closed_form import highest_rates, static_rates
from distill.errors import DistillError, InputError, ScorerFileError
from distill.export import export_scorer, mapped_back
from distill.runtime import Scorer

SCORER = Scorer.from_bytes(scorer_bytes("dense"))
STRICT = Scorer.from_bytes(scorer_bytes("dense"), strict=True)


def inside_table(seed=0, n=20, n_actions=4):
    """A table whose every leaf is in range."""
    rng = np.random.default_rng(seed)
    while True:
        t = table(rng, n, n_actions)
        if SCORER.score(**t).in_range.all():
            return t


def closed_form(t):
    columns = {k: t[k] for k in ("mean", "var", "noise_var", "gain", "offset")}
    return static_rates(**columns, remaining=t["remaining"])


def test_pick_is_the_largest_net_value_and_the_first_on_ties():
    t = inside_table()
    got = SCORER.score(**t)
    assert got.pick == int(np.argmax(got.voc - t["cost"])) == SCORER.pick(**t)
    dear = {**t, "cost": np.full(20, 1e9)}
    assert not SCORER.score(**dear).worth_it
    np.testing.assert_array_equal(SCORER.score(**dear).voc, got.voc)  # gross of cost
    twins = {k: np.repeat(v, 2) if isinstance(v, np.ndarray) else v for k, v in t.items()}
    for scorer in (SCORER, Scorer.closed_form()):
        both = scorer.score(**twins)
        np.testing.assert_array_equal(both.voc[::2], both.voc[1::2])
        assert both.pick % 2 == 0


def test_batch_is_between_one_and_what_remains():
    for seed in range(20):
        t = inside_table(seed)
        batch = SCORER.score(**t).batch
        assert np.all((batch >= 1) & (batch <= t["remaining"]))


def test_results_are_the_callers_own():
    t = inside_table()
    first = SCORER.score(**t)
    kept = first.voc.copy()
    SCORER.score(**inside_table(5))
    np.testing.assert_array_equal(first.voc, kept)


def test_lists_integers_and_float32_are_taken():
    t = inside_table()
    got = SCORER.score(**t)
    as_lists = {k: v.tolist() if isinstance(v, np.ndarray) else v for k, v in t.items()}
    np.testing.assert_array_equal(SCORER.score(**as_lists).voc, got.voc)
    small = {k: v.astype(np.float32) if k in NAMES and k != "action" else v for k, v in t.items()}
    np.testing.assert_allclose(SCORER.score(**small).voc, got.voc, rtol=FLOAT_COLUMNS, atol=EXACT)
    small["action"] = t["action"].astype(np.uint8)
    small["mean"] = np.arange(20)
    SCORER.score(**small)
    strided = {k: np.repeat(v, 2)[::2] if isinstance(v, np.ndarray) else v for k, v in t.items()}
    np.testing.assert_array_equal(SCORER.score(**strided, deadline=None).voc, got.voc)
    for left in (t["remaining"], float(t["remaining"]), np.int64(t["remaining"]), np.array([t["remaining"]])):
        np.testing.assert_array_equal(SCORER.score(**{**t, "remaining": left}).voc, got.voc)


@pytest.mark.parametrize(
    "scorer", [SCORER, STRICT, Scorer.closed_form()], ids=["lax", "strict", "closed form"]
)
def test_what_is_no_leaf_table_is_named(scorer):
    t = inside_table()
    for change, word in (
        ({"mean": 3.0}, "mean: must have shape"),
        ({"mean": np.zeros((20, 1))}, "mean: must have shape"),
        ({"mean": []}, "mean: must have shape"),
        ({"var": t["var"][:5]}, r"var: must have shape \(20,\)"),
        ({"var": t["var"][:1]}, r"var: must have shape \(20,\)"),
        ({"mean": t["mean"][:19], "var": np.r_[t["var"], 1.0]}, r"var: must have shape \(19,\)"),
        ({"var": np.full(20, 1j)}, "var: must hold numbers"),
        ({"var": np.full(20, "x")}, "var: must hold numbers"),
        ({"var": [None] * 20}, "var: must hold numbers"),
        ({"var": [[1.0], 2.0] * 10}, "var: must"),
        ({"gain": {}}, "gain: must hold numbers"),
        ({"action": t["action"].astype(float)}, "action: must hold whole numbers"),
        ({"action": t["action"][::2]}, "action: must have shape"),
        ({"remaining": "5"}, "remaining: must hold numbers"),
        ({"remaining": None}, "remaining: must hold numbers"),
        ({"remaining": [1, 2]}, "remaining: must be one number"),
        ({"tree": np.zeros(3, dtype=int)}, "tree: must have shape"),
        ({"tree": np.array([0, 1] * 10)}, "tree: rows of one tree"),
    ):
        for _ in range(2):  # the second call meets buffers of the first
            with pytest.raises(InputError, match=word):
                scorer.score(**{**t, **change})


BAD_VALUES = {
    "mean": [np.nan, np.inf, -np.inf],
    "var": [np.nan, np.inf, -1.0, -1e-300],
    "noise_var": [np.nan, np.inf, 0.0, -2.0],
    "gain": [np.nan, np.inf, 1e300, -1e300],
    "offset": [np.nan, -np.inf],
    "action": [-1, 20, 2**62, -(2**62)],
    "cost": [np.nan, np.inf],
}


@pytest.mark.parametrize("name", BAD_VALUES)
def test_an_invalid_value_is_flagged_and_the_closed_form_answers_for_the_rest(name):
    for value in BAD_VALUES[name]:
        for row in (0, 7, 19):
            t = inside_table()
            t[name] = t[name].copy()
            t[name][row] = value
            scorer = Scorer.from_bytes(scorer_bytes("dense"))
            got = scorer.score(**t)
            assert not got.in_range.any()
            assert got.voc[row] == 0
            rest = np.arange(20) != row
            expected, batch = closed_form(
                {k: v[rest] if isinstance(v, np.ndarray) else v for k, v in t.items()}
            )
            np.testing.assert_array_equal(got.voc[rest], expected)
            np.testing.assert_array_equal(got.batch[rest], batch)
            assert got.pick != row
            assert (scorer.counters.invalid, scorer.counters.fallback) == (1, 1)
            with pytest.raises(InputError, match=rf"{name}\[{row}\]"):
                STRICT.score(**t)


def test_an_invalid_number_of_rollouts_left_is_flagged():
    for left in (-1, np.nan, np.inf, 2.0**54, 10**400):
        t = {**inside_table(), "remaining": left}
        if left == 10**400:
            with pytest.raises(InputError, match="remaining"):
                SCORER.score(**t)
            continue
        got = SCORER.score(**t)
        assert not got.in_range.any()
        assert np.all(got.voc == 0)
        with pytest.raises(InputError, match="remaining"):
            STRICT.score(**t)


def test_no_rollout_left_and_a_single_action_are_worth_nothing():
    for t in ({**inside_table(), "remaining": 0}, table(np.random.default_rng(0), 8, 1)):
        got = SCORER.score(**t)
        assert np.all(got.voc[got.in_range] == 0)
        assert SCORER.score(**{**t, "remaining": 0}).voc.max() == 0
        assert not SCORER.score(**{**t, "remaining": 0}).worth_it


def test_leaves_unlike_those_of_training_are_flagged_and_scored_at_the_edge_of_the_range():
    narrow = arguments("dense")
    narrow["ranges"] = narrow["ranges"].copy()
    narrow["ranges"][0, 1] = 2.0  # as if training had met thresholds up to 2 only
    scorer = Scorer.from_bytes(export_scorer(**narrow))
    t = inside_table()
    got, wide = scorer.score(**t), SCORER.score(**t)
    near = graph().matrix(t).x[:, 0] <= scorer.facts["ranges"]["threshold"][1]
    assert 0 < near.sum() < 20
    np.testing.assert_array_equal(got.in_range, near)
    np.testing.assert_array_equal(got.voc[near], wide.voc[near])
    limits = np.array([scorer.facts["ranges"][name] for name in graph().names], np.float32).T
    edge = np.clip(graph().matrix(t).x, *limits)
    learned = mapped_back(
        np.asarray(fitted("dense").predict(edge), dtype=float), *graph().matrix(t)[1:3], "log_ratio"
    )
    np.testing.assert_allclose(got.voc[~near], learned[~near], rtol=ONNX_ELSEWHERE)
    assert np.any(got.voc[~near] != wide.voc[~near])
    assert got.pick == int(np.argmax(got.voc - t["cost"])) == scorer.pick(**t)
    assert (scorer.counters.out_of_range, scorer.counters.fallback) == (2, 0)


def bound_of_any_rate(t):
    return highest_rates(t["var"], t["noise_var"], t["gain"])


def test_the_upper_bound_is_the_files_where_it_answers_and_one_that_always_holds_elsewhere():
    narrow = arguments("dense")
    narrow["ranges"] = narrow["ranges"].copy()
    narrow["ranges"][0, 1] = 2.0
    scorer = Scorer.from_bytes(export_scorer(**narrow))
    t = inside_table()
    got, wide = scorer.score(**t), SCORER.score(**t)
    near = got.in_range
    assert 0 < near.sum() < 20
    assert np.all(wide.voc_high >= wide.voc)
    np.testing.assert_array_equal(got.voc_high[near], wide.voc_high[near])
    np.testing.assert_array_equal(got.voc_high[~near], np.maximum(bound_of_any_rate(t), got.voc)[~near])
    t["mean"][3] = np.nan
    bad = scorer.score(**t)
    assert bad.voc_high[3] == 0
    rest = np.arange(20) != 3
    np.testing.assert_array_equal(bad.voc_high[rest], bound_of_any_rate(t)[rest])
    assert not np.any(Scorer.closed_form().score(**{**t, "remaining": 0}).voc_high)


def test_a_file_of_the_format_before_answers_with_the_bound_that_always_holds():
    old = Scorer.from_bytes(without_upper_bound(scorer_bytes("dense")), strict=True)
    assert old.facts["format"] == "voc-scorer/1"
    t = inside_table()
    got, new = old.score(**t), SCORER.score(**t)
    np.testing.assert_array_equal(got.voc, new.voc)
    assert got.pick == new.pick == old.pick(**t)
    np.testing.assert_array_equal(got.voc_high, np.maximum(bound_of_any_rate(t), got.voc))


def test_after_the_deadline_the_closed_form_answers():
    scorer = Scorer.from_bytes(scorer_bytes("dense"))
    t = inside_table()
    scorer.pick(**t)
    late = scorer.score(**t, deadline=time.perf_counter() - 1)
    np.testing.assert_array_equal(late.voc, closed_form(t)[0])
    in_time = scorer.score(**t, deadline=time.perf_counter() + 60)
    assert in_time.in_range.all()
    assert (scorer.counters.late, scorer.counters.fallback, scorer.counters.decisions) == (1, 1, 3)


def test_a_guarded_load_answers_by_the_closed_form(tmp_path):
    path = tmp_path / "broken.onnx"
    path.write_bytes(b"no scorer")
    with pytest.raises(ScorerFileError, match=r"broken\.onnx"):
        Scorer.load(path)
    with pytest.raises(ScorerFileError, match="No such file"):
        Scorer.load(tmp_path / "missing.onnx")
    scorer = Scorer.load(path, guard=True)
    assert "broken.onnx" in str(scorer.refused)
    t = inside_table()
    np.testing.assert_array_equal(scorer.score(**t).voc, closed_form(t)[0])
    assert scorer.counters.fallback == 1


def test_the_digest_is_checked(tmp_path):
    import hashlib

    path = tmp_path / "scorer.onnx"
    path.write_bytes(scorer_bytes("linear"))
    digest = hashlib.sha256(path.read_bytes()).hexdigest()
    assert Scorer.load(path, sha256=digest.upper()).refused is None
    with pytest.raises(ScorerFileError, match="SHA-256"):
        Scorer.load(path, sha256="0" * 64)


@pytest.mark.parametrize("kind", KINDS)
def test_threads_share_a_scorer_and_get_the_bits_of_one_thread(kind):
    scorer = Scorer.from_bytes(scorer_bytes(kind))
    tables = [table(np.random.default_rng(i), 5 + i % 7, 3) for i in range(30)]
    expected = [scorer.score(**t).voc for t in tables]
    wrong = []

    def work(start):
        for i in range(400):
            j = (start + i) % len(tables)
            if not np.array_equal(scorer.score(**tables[j]).voc, expected[j]):
                wrong.append(j)

    threads = [threading.Thread(target=work, args=(k * 5,)) for k in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert not wrong


CALLS = int(os.environ.get("VOC_DISTILL_SCORE_CALLS", "240000"))  # the full count is 10,000,000


@pytest.mark.slow
def test_many_calls_on_eight_threads_keep_memory_and_bits():
    import psutil

    scorer = Scorer.from_bytes(scorer_bytes("dense"))
    tables = [table(np.random.default_rng(i), 4 + i % 9, 3) for i in range(40)]
    expected = [[x.tobytes() for x in scorer.score(**t)[:4]] for t in tables]
    wrong = []

    def work(calls):
        try:
            for i in range(calls):
                j = i % len(tables)
                if [x.tobytes() for x in scorer.score(**tables[j])[:4]] != expected[j]:
                    wrong.append(j)
        except Exception as e:  # a thread would swallow it
            wrong.append(e)

    def run(calls):
        threads = [threading.Thread(target=work, args=(calls // 8,)) for _ in range(8)]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
        gc.collect()
        return psutil.Process().memory_info().rss

    before = run(20_000)
    counted = scorer.counters.decisions
    grown = run(CALLS) - before
    assert not wrong
    assert grown < 8 * 2**20
    assert scorer.counters.fallback == 0
    assert scorer.counters.decisions > counted


def test_memory_does_not_grow_with_calls_or_sizes():
    import psutil

    scorer = Scorer.from_bytes(scorer_bytes("dense"))
    tables = [table(np.random.default_rng(i), 2 + i, 2) for i in range(100)]

    def work():
        for t in tables:
            for _ in range(5):
                scorer.score(**t)

    for _ in range(3):
        work()
    gc.collect()
    before = psutil.Process().memory_info().rss
    for _ in range(10):
        work()
    gc.collect()
    assert psutil.Process().memory_info().rss - before < 4 * 2**20
    assert len(scorer._local.kept) <= 32


def test_values_at_a_hundred_million_score_like_at_zero():
    t = inside_table()
    far = {**t, "offset": t["offset"] + 2.0**27}
    near = SCORER.score(**{**t, "offset": far["offset"] - 2.0**27})
    np.testing.assert_allclose(SCORER.score(**far).voc, near.voc, rtol=ONNX_ELSEWHERE, atol=CLOSED_FORM)


@np.errstate(all="ignore")
def fuzzed(draw_seed: int):
    """A table with up to four hostile changes of shape, type or value."""
    rng = np.random.default_rng(draw_seed)
    n = int(rng.integers(1, 40))
    t = table(rng, n, int(rng.integers(1, n + 1)), int(rng.integers(0, 500)))
    names = [*NAMES, "remaining"]
    for _ in range(int(rng.integers(0, 5))):
        name = names[rng.integers(len(names))]
        x = t[name]
        kind = rng.integers(12)
        if isinstance(x, np.ndarray) and x.ndim == 1 and len(x) and x.dtype.kind in "if" and kind < 6:
            x = x.astype(float) if kind < 4 and name != "action" else x.copy()
            values = [np.nan, np.inf, -np.inf, 1e308, -1e308, 5e-324, -1.0, 0.0]
            if x.dtype.kind == "i":
                values = [-1, n, np.iinfo(x.dtype).max, np.iinfo(x.dtype).min, 0]
            x[rng.integers(len(x))] = values[rng.integers(len(values))]
        elif kind == 6 and isinstance(x, np.ndarray):
            x = x[: rng.integers(0, len(x) + 1)]
        elif kind == 7:
            x = [None, "text", 3.5, -2, [[1, 2]], {}, b"bytes", np.datetime64("2020-01-01")][rng.integers(8)]
        elif kind == 8 and isinstance(x, np.ndarray):
            x = x.reshape(-1, 1)
        elif kind == 9 and isinstance(x, np.ndarray) and x.dtype.kind in "if":
            x = x.astype([np.float16, np.complex128, np.int8, np.bool_, object][rng.integers(5)])
        elif kind == 10 and name != "action" and isinstance(x, np.ndarray) and x.dtype.kind == "f":
            x = x * 10.0 ** rng.integers(-300, 300)
        elif kind == 11:
            t["remaining"] = [np.nan, -1, 10**400, 2**60, 1e-300, True, 0][rng.integers(7)]
            continue
        t[name] = x
    return t


def check_fuzzed(seed):
    t = fuzzed(seed)
    for scorer in (SCORER, STRICT):
        try:
            got = scorer.score(**t)
        except DistillError as e:
            assert "\n" not in str(e)
            continue
        assert np.all(np.isfinite(got.voc) & np.isfinite(got.voc_high))
        assert np.all((got.voc >= 0) & (got.voc_high >= got.voc))
        assert 0 <= got.pick < len(got.voc)


@settings(deadline=None, max_examples=10, derandomize=True)
@given(st.integers(0, 2**20))
def test_hostile_tables_are_scored_flagged_or_refused(start):
    for seed in range(100):
        check_fuzzed(start + seed)


@pytest.mark.parametrize("name", [*NAMES, "remaining"])
@pytest.mark.parametrize("kind", [np.bool_, np.complex128, object, np.str_, "m8[s]"])
def test_a_second_call_refuses_what_the_first_call_does(name: str, kind: type | str) -> None:
    t = inside_table()
    wrong = {**t, name: np.asarray(t[name]).astype(kind)}
    scorer, told = Scorer.from_bytes(scorer_bytes()), []
    for _ in range(2):
        for call in (scorer.pick, scorer.score):
            with pytest.raises(InputError, match=f"^{name}: must hold (whole )?numbers; got ") as e:
                call(**wrong)
            told.append(str(e.value))
        scorer.pick(**t)  # the next call of as many leaves finds its arrays laid out
    assert len(set(told)) == 1


@pytest.mark.slow
def test_twenty_thousand_hostile_tables():
    for seed in range(20_000):
        check_fuzzed(10**7 + seed)


def test_many_trees_in_one_call():
    columns = rows(np.random.default_rng(4), 8)
    got = SCORER.score(**columns)
    assert len(got.voc) == len(got.voc_high) == len(columns["mean"])
    assert len(got.pick) == len(got.worth_it) == 8
    one = SCORER.score(**{**columns, "remaining": 50})
    assert len(one.voc) == len(got.voc)


def test_the_self_test_of_a_file_is_run():
    assert SCORER.counters.decisions > 0
    assert Scorer.from_bytes(scorer_bytes("linear")).counters.decisions == 0
    assert len(SCORER.facts["self_test"]) == 3
    assert training().x.shape[1] == len(graph().names) == len(SCORER.facts["features"])
