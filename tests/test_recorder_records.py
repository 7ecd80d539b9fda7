"""What an agent with win/loss leaves, chance nodes or correlated leaves hands to the recorder."""

from __future__ import annotations

import itertools
import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from builders import chance_record, flat_record, win_loss_record
from hypothesis import given, settings
from hypothesis import strategies as st

from distill import trace_line
from distill.errors import InputError
from distill.family import draw, load_family
from distill.record import from_record, parse_record, to_record
from distill.recorder import Recorder
from distill.sample_data import FAMILIES
from distill.traces import read_trees
from distill.tree import BeliefTree, leaf_table

COINS: dict[str, Any] = {
    "alpha": [1.0, 2.0, 0.5],
    "beta": [1.0, 1.0, 3.0],
    "low": [0.0, -1.0, 0.0],
    "high": [1.0, 1.0, 2.0],
    "action": [0, 0, 1],
}
ENDS = ("written", "invalid", "dropped", "over_cap", "lost")


def read_all(folder: Path) -> list[BeliefTree]:
    paths = sorted(folder.glob("*.jsonl.gz"))
    return [tree for path in paths for _, tree in read_trees(path)]


def taken(seen: trace_line.Seen) -> dict[str, Any] | None:
    """What a reader of the trace finds; None where there is no record."""
    try:
        return to_record(parse_record(trace_line.trace_line(seen)))
    except InputError:
        return None


def checked(record: dict[str, Any]) -> dict[str, Any] | None:
    try:
        return to_record(from_record(record))
    except InputError:
        return None


# --- win/loss leaf tables ---------------------------------------------------------------------------


def test_a_win_loss_table_comes_back_bit_for_bit(tmp_path: Path) -> None:
    rng = np.random.default_rng(4)
    n = 300
    want: dict[str, Any] = {
        "alpha": rng.exponential(size=n), "beta": rng.exponential(size=n), "low": rng.normal(size=n),
        "gain": rng.uniform(0.1, 1, n), "offset": rng.normal(size=n), "cost": rng.exponential(size=n),
        "action": np.sort(rng.integers(0, 5, n)),
    }  # fmt: skip
    want["high"] = want["low"] + rng.exponential(size=n)
    with Recorder(tmp_path, strict=True) as recorder:
        recorder.see(**want, remaining=12, extra={"shift": "night"})
    (tree,) = read_all(tmp_path)
    assert tree.belief == "win_loss"
    assert (tree.remaining, dict(tree.extra or {})) == (12, {"shift": "night"})
    table = leaf_table(tree)
    for name, x in want.items():
        np.testing.assert_array_equal(getattr(table, name), x)


NUMBERS = st.one_of(
    st.floats(width=64),
    st.sampled_from([0.0, -0.0, 1.0, 5e-324, 1e100, 1.1e100, -1.0, 2.0**53, 2.0**53 + 2, float("nan")]),
)


@settings(deadline=None, max_examples=200, derandomize=True)
@given(st.data())
def test_a_win_loss_table_is_taken_exactly_when_its_record_is_valid(data: st.DataObject) -> None:
    """Against the record's own rules, on a record built the plain way."""
    n = data.draw(st.integers(1, 3))
    good = {"alpha": 0.5, "beta": 1.0, "low": -1.0, "high": 2.0, "gain": 0.5, "offset": 0.25, "cost": 0.125}
    columns = {name: np.full(n, value) for name, value in good.items()}
    for name in data.draw(st.lists(st.sampled_from(list(good)), max_size=2)):
        columns[name][data.draw(st.integers(0, n - 1))] = data.draw(NUMBERS)
    plain: dict[str, Any] = {
        "format": "belief-tree/1",
        "parent": [-1, 0, *[1] * n],
        "kind": ["decision", "decision", *["leaf"] * n],
        "reward": [0, 0, *columns["offset"].tolist()],
        "discount": [1, 1, *columns["gain"].tolist()],
    }
    for name in ("alpha", "beta", "low", "high", "cost"):
        plain[name] = [None, None, *columns[name].tolist()]
    assert taken(trace_line.copy_table({**columns, "action": [0] * n}, None, (), {})) == checked(plain)


@pytest.mark.parametrize(
    ("change", "problem"),
    [
        ({"beta": None}, "beta: is missing"),
        ({"alpha": [1.0, 0.0, 1.0]}, "alpha[1]: must be > 0"),
        ({"high": [0.0, 1.0, 2.0]}, "high[0]: must be above 'low'"),
        ({"low": [0.0, 1.0]}, "low: must have shape (3,), as 'alpha'"),
        ({"mean": [0.0, 0.0, 0.0]}, "must not be given beside 'mean'"),
    ],
)
def test_what_is_no_win_loss_table_is_counted(tmp_path: Path, change: dict[str, Any], problem: str) -> None:
    with Recorder(tmp_path) as recorder:
        recorder.see(**{**COINS, **change})
        recorder.see(**COINS)
    assert problem in (recorder.counters.problem or "")
    assert (recorder.counters.invalid, recorder.counters.written) == (1, 1)
    with Recorder(tmp_path, strict=True) as strict, pytest.raises(InputError):
        strict.see(**{**COINS, **change})


# --- records ----------------------------------------------------------------------------------------


def as_arrays(record: dict[str, Any]) -> dict[str, Any]:
    """The record as an agent that works in NumPy has it: arrays, NaN where there is no number."""
    out: dict[str, Any] = {}
    for key, value in record.items():
        if not isinstance(value, list):
            out[key] = value
        elif key in ("mean", "var", "noise_var", "alpha", "beta", "low", "high", "count", "cost"):
            out[key] = np.array([np.nan if x is None else x for x in value])
        else:
            out[key] = np.array(value, dtype=object if None in value else None)
    return out


def test_records_of_every_kind_come_back(tmp_path: Path) -> None:
    names = ("cold-store", "shared-aisles", "crossing-traffic", "on-time")
    trees = [draw(load_family(FAMILIES / f"{name}.toml"), 0, i) for name in names for i in range(3)]
    records = [{**to_record(tree), "extra": {"i": i}} for i, tree in enumerate(trees)]
    without = {key: x for key, x in records[-1].items() if key != "format"}
    tuples = {key: tuple(x) if isinstance(x, list) else x for key, x in records[-1].items()}
    numpy_lists = {
        key: [np.int64(p) for p in x] if key == "parent" else x for key, x in records[-1].items()
    } | {"remaining": np.int64(records[-1]["remaining"])}
    with Recorder(tmp_path, strict=True) as recorder:
        for record in records:
            recorder.see_record(record)
            recorder.see_record(as_arrays(record))
        for other in (without, tuples, numpy_lists):
            recorder.see_record(other)
    want = [record for record in records for _ in range(2)] + 3 * [records[-1]]
    found = [to_record(tree) for tree in read_all(tmp_path)]
    assert found == [to_record(from_record(record)) for record in want]


def test_a_record_is_copied_when_seen(tmp_path: Path) -> None:
    lists = chance_record(extra={"note": [1]})
    arrays = as_arrays(chance_record())
    cov = flat_record(cov=[[1.0, 0.0], [0.0, 1.0]]) | {"var": None}
    cov = {key: x for key, x in cov.items() if x is not None}
    n = cov["kind"].count("leaf")
    cov["cov"] = np.eye(n).tolist()
    want = [to_record(from_record(r)) for r in (json.loads(json.dumps(lists)), chance_record(), cov)]
    want = json.loads(json.dumps(want))
    with Recorder(tmp_path) as recorder:
        recorder.see_record(lists)
        recorder.see_record(arrays)
        recorder.see_record(cov)
        lists["mean"][2] = lists["parent"][1] = None
        lists["extra"]["note"].append(2)
        arrays["mean"][:] = np.nan
        cov["cov"][0][0] = "gone"
        cov.clear()
    assert [to_record(tree) for tree in read_all(tmp_path)] == want


class Hostile:
    def __array__(self, *_: object, **__: object) -> None:
        raise RuntimeError("no array today")

    def __repr__(self) -> str:
        raise RuntimeError("no text either")

    def __len__(self) -> int:
        raise RuntimeError("no length")


class HostileList(list[Any]):
    def __iter__(self) -> Any:
        raise RuntimeError("no items")


def nested() -> list[Any]:
    out: list[Any] = []
    for _ in range(100_000):
        out = [out]
    return out


PARENT = [-1, 0, 0]
BAD: list[tuple[Any, str]] = [
    (None, "record: must be a dict"),
    ([1], "record: must be a dict"),
    (Hostile(), "record: must be a dict"),
    ({}, "parent"),
    ({"depth": [1]}, "key 'depth': is not a key of belief-tree/1"),
    ({"parent": 3}, "parent: must be a list or an array"),
    ({"parent": Hostile()}, "parent: must be a list or an array"),
    ({"parent": HostileList(PARENT)}, "no items"),
    ({"parent": [-1, 0, Hostile()]}, "parent: must hold numbers; got 'Hostile'"),
    ({"parent": np.array(-1)}, "parent: must have as many dimensions"),
    ({"parent": itertools.count()}, "parent: must be a list or an array"),
    ({"parent": nested()}, "parent: must hold numbers"),
    ({"cov": [[1.0, 0.0], 3]}, "cov: must be a list or an array"),
    ({"cov": np.ones(2)}, "cov: must have as many dimensions"),
    ({"alpha": [None, 1.0, float("nan")]}, "alpha[2]"),
    ({"alpha": [None, 1.0, -1.0]}, "alpha[2]: must be > 0"),
    ({"reward": [0.0, float("nan"), 0.0]}, "reward[1]"),
    ({"high": [[None], [1.0], [1.0]]}, "high: must hold numbers"),
    ({"remaining": [1, 2]}, "remaining: must hold numbers"),
    ({"remaining": 1.5}, "remaining"),
    ({"id": Hostile()}, "id: must hold numbers"),
    ({"extra": {"x": Hostile()}}, "extra: must be an object for JSON"),
    ({"extra": [1]}, "extra"),
    ({"mean": [None, 0.0, 0.0]}, "must not be mixed"),
    ({"format": "belief-tree/2"}, "format: must be"),
]


@pytest.mark.parametrize(("change", "problem"), BAD, ids=[problem[:30] for _, problem in BAD])
def test_what_is_no_record_is_counted_and_not_written(tmp_path: Path, change: Any, problem: str) -> None:
    whole = isinstance(change, dict) and change
    record = {**win_loss_record(), **change} if whole else change
    with Recorder(tmp_path) as recorder:
        recorder.see_record(record)
        recorder.flush()
        assert problem in (recorder.counters.problem or "")
        recorder.see_record(win_loss_record())
    assert (recorder.counters.invalid, recorder.counters.written) == (1, 1)
    assert len(read_all(tmp_path)) == 1
    with Recorder(tmp_path, strict=True) as strict, pytest.raises((InputError, RuntimeError)):
        strict.see_record(record)


def test_huge_records_are_refused_before_they_are_copied(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(trace_line, "_MOST_NUMBERS", 20)
    with Recorder(tmp_path) as recorder:
        recorder.see_record({"parent": np.zeros(10), "kind": ["leaf"] * 11})
        assert "must not hold more than 20 numbers" in (recorder.counters.problem or "")
        recorder.see_record({"parent": range(3)})  # type: ignore[dict-item]
    assert recorder.counters.invalid == 2


def test_records_wait_in_bounded_memory(tmp_path: Path) -> None:
    big = win_loss_record()
    with Recorder(tmp_path, queue_bytes=1100, sample=1.0) as recorder:
        recorder.see_record(big)
    counters = vars(recorder.counters)
    assert recorder.counters.dropped == 1
    assert sum(counters[name] for name in ENDS) == counters["sampled"] == 1


@settings(deadline=None, max_examples=150, derandomize=True)
@given(st.data())
def test_a_record_is_taken_exactly_when_it_is_valid(data: st.DataObject) -> None:
    record = data.draw(st.sampled_from([chance_record, win_loss_record]))(remaining=5)
    for key in data.draw(st.lists(st.sampled_from(sorted(set(record) - {"format"})), max_size=2)):
        finite = NUMBERS.filter(lambda x: x == x)
        value = st.one_of(finite, st.integers(-2, 5), st.none(), st.text(max_size=3))
        if isinstance(record[key], list):
            column = list(record[key])
            column[data.draw(st.integers(0, len(column) - 1))] = data.draw(value)
            record[key] = column
        else:
            record[key] = data.draw(value)
    assert taken(trace_line.copy_record(record)) == checked(record)
