from __future__ import annotations

import json
import tracemalloc
from dataclasses import replace
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from distill import schema, shards
from distill.errors import InputError
from distill.family import draw, load_family
from distill.files import sha256_of
from distill.query import Priced, Query
from distill.record import from_record, to_record
from distill.shards import Labelled
from distill.tree import leaf_table

FAMILIES = Path(__file__).parent.parent / "datasets" / "families"
ALL = sorted(p.stem for p in FAMILIES.glob("*.toml"))


def _priced(tree, seed=0):
    """Labels with recognisable values; what they mean is of no matter here."""
    rng = np.random.default_rng(seed)
    n = tree.n_leaves
    return Priced(
        rng.random(n),
        rng.integers(1, 9, n),
        rng.random(len(tree.action_nodes)),
        rng.random(n) * 1e-9,
        "made up",
    )


def _rows(name, n=6, start=0, **query):
    family = load_family(FAMILIES / f"{name}.toml")
    trees = [draw(family, 0, i) for i in range(start, start + n)]
    return [
        Labelled(i, t, Query(**{"batch": None, "remaining": t.remaining, **query}), _priced(t, i))
        for i, t in enumerate(trees, start)
    ]


def _dataset(folder, *parts, **more):
    folder.mkdir(exist_ok=True)
    entries = [shards.write_shard(folder, p, rows) for p, rows in enumerate(parts)]
    manifest = {"format": schema.DATASET_FORMAT, "complete": True, "shards": entries, **more}
    shards.write_manifest(folder, manifest)
    return folder


def _same(a, b):
    for key, value in vars(a).items():
        other = getattr(b, key)
        if isinstance(value, np.ndarray):
            assert value.dtype == other.dtype, key
            assert np.array_equal(value, other), key
        else:
            assert value == other, key
            assert type(value) is type(other), key


@pytest.mark.parametrize("name", ALL)
def test_trees_come_back_bit_for_bit(tmp_path, name):
    rows = _rows(name)
    folder = _dataset(tmp_path / "d", rows[:4], rows[4:])
    found = list(shards.read_trees(folder))
    assert [number for number, _ in found] == [r.number for r in rows]
    for (_, tree), row in zip(found, rows, strict=True):
        _same(tree, row.tree)


def test_every_scalar_of_a_record_comes_back(tmp_path):
    base = to_record(_rows("cold-store", 1)[0].tree)
    records = [
        {**base, "horizon": "inf", "batch": 3, "id": "a\n\u00e9", "extra": {"b": [1, None], "a": "x"}},
        {**base, "horizon": 2.5, "remaining": 2**53, "id": 10**25},
        {k: v for k, v in base.items() if k not in ("remaining", "id", "count", "cost")},
    ]
    trees = [from_record(r) for r in records]
    rows = [Labelled(i, t, Query(), _priced(t)) for i, t in enumerate(trees)]
    back = list(shards.read_trees(_dataset(tmp_path / "d", rows)))
    for (_, tree), row in zip(back, rows, strict=True):
        _same(tree, row.tree)
        assert to_record(tree) == to_record(row.tree)
    assert list(back[0][1].extra) == ["b", "a"]


def test_candidates_are_the_leaf_table_with_labels(tmp_path):
    rows = _rows("cold-store", 5)
    found = shards.read_candidates(_dataset(tmp_path / "d", rows[:2], rows[2:]))
    tables = [leaf_table(r.tree) for r in rows]
    for name in ("mean", "var", "noise_var", "gain", "offset", "action", "cost"):
        assert np.array_equal(found[name], np.concatenate([getattr(t, name) for t in tables])), name
    for name, of in (("label", "voc"), ("label_batch", "batch"), ("error", "error")):
        assert np.array_equal(found[name], np.concatenate([getattr(r.priced, of) for r in rows])), name
    lengths = [r.tree.n_leaves for r in rows]
    assert np.array_equal(found["tree"], np.repeat(range(5), lengths))
    assert np.array_equal(found["leaf"], np.concatenate([np.arange(n) for n in lengths]))
    assert np.array_equal(found["remaining"], np.repeat([r.tree.remaining for r in rows], lengths))
    assert np.all(np.isinf(found["horizon"]))
    assert not {"batch", "alpha", "beta", "low", "high"} & set(found)  # null throughout
    assert {str(a.dtype) for a in found.values()} == {"int32", "int64", "float64"}


@pytest.mark.parametrize("name", ["crossing-traffic", "shared-aisles"])
def test_what_no_leaf_table_holds_is_left_null(tmp_path, name):
    rows = _rows(name, 20)
    found = shards.read_candidates(_dataset(tmp_path / "d", rows))
    flat = np.concatenate(
        [np.full(r.tree.n_leaves, not r.tree.has_chance and r.tree.cov is None) for r in rows]
    )
    assert not np.all(flat)
    if np.any(flat):
        assert np.array_equal(np.isfinite(found["gain"]), flat)
        assert np.array_equal(np.isfinite(found["offset"]), flat)
    else:
        assert "gain" not in found
    var = [r.tree.var if r.tree.cov is None else np.diag(r.tree.cov) for r in rows]
    assert np.array_equal(found["var"], np.concatenate(var))
    for r in rows:
        action = found["action"][found["tree"] == r.number]
        for leaf, node in enumerate(r.tree.leaf_nodes):
            while r.tree.parent[node] != 0:
                node = r.tree.parent[node]
            assert r.tree.action_nodes[action[leaf]] == node


def test_beliefs_can_be_mixed_and_missing_numbers_become_nan(tmp_path):
    gauss, coins = _rows("cold-store", 2), _rows("on-time", 2, start=2, remaining=None, batch=5, horizon=3)
    found = shards.read_candidates(_dataset(tmp_path / "d", gauss, coins))
    first = found["tree"] < 2
    assert np.array_equal(np.isnan(found["alpha"]), first)
    assert np.array_equal(np.isnan(found["mean"]), ~first)
    assert np.array_equal(np.isnan(found["batch"]), first)
    assert set(found["batch"][~first]) == {5.0}
    assert np.all(np.isnan(found["remaining"][~first]))
    assert np.array_equal(found["remaining"][first], np.concatenate(
        [np.full(r.tree.n_leaves, r.tree.remaining) for r in gauss]))  # fmt: skip


def test_columns_can_be_chosen(tmp_path):
    folder = _dataset(tmp_path / "d", _rows("cold-store", 2))
    assert list(shards.read_candidates(folder, columns=["label", "tree"])) == ["label", "tree"]
    assert np.all(np.isnan(shards.read_candidates(folder, columns=["alpha"])["alpha"]))
    with pytest.raises(InputError, match=r"columns: must be among tree, weight, leaf, .*; got 'labels'"):
        shards.read_candidates(folder, columns=["labels"])


def test_datasets_of_before_a_column_s_time_are_read(tmp_path):
    folder = _dataset(tmp_path / "d", _rows("cold-store", 3))
    whole, trees = shards.read_candidates(folder), [to_record(t) for _, t in shards.read_trees(folder)]
    manifest = shards.read_manifest(folder)
    for name in manifest["shards"][0]["files"]:
        table = pq.read_table(folder / name)
        new = [c for c in ("weight", "source", "draw") if c in table.schema.names]
        pq.write_table(table.drop_columns(new), folder / name)
        manifest["shards"][0]["files"][name] = sha256_of(folder / name)
    shards.write_manifest(folder, manifest)
    found = shards.read_candidates(folder)
    assert found.keys() == whole.keys() - {"weight"}
    assert all(np.array_equal(found[name], whole[name]) for name in found)
    assert [to_record(t) for _, t in shards.read_trees(folder)] == trees


def test_weight_and_origin_of_each_tree_are_kept(tmp_path):
    rows = [replace(r, weight=0.5 + i, source="a", draw=7 + i) for i, r in enumerate(_rows("cold-store", 3))]
    folder = _dataset(tmp_path / "d", rows)
    table = pq.read_table(folder / "trees-00000.parquet").to_pydict()
    assert [table[name] for name in ("weight", "source", "draw")] == [[0.5, 1.5, 2.5], ["a"] * 3, [7, 8, 9]]
    found = shards.read_candidates(folder)
    assert np.array_equal(found["weight"], found["tree"] + 0.5)


def test_trees_without_a_good_label_are_kept_aside(tmp_path):
    rows = _rows("cold-store", 4)
    rows[1] = Labelled(1, rows[1].tree, rows[1].query, None, "refused: no method")
    rows[3] = Labelled(3, rows[3].tree, rows[3].query, rows[3].priced, "tolerance: bound 2")
    folder = _dataset(tmp_path / "d", rows)
    entry = shards.read_manifest(folder)["shards"][0]
    assert (entry["trees"], entry["aside"]) == (2, 2)
    assert entry["candidates"] == rows[0].tree.n_leaves + rows[2].tree.n_leaves
    assert [n for n, _ in shards.read_trees(folder)] == [0, 2]
    assert set(shards.read_candidates(folder)["tree"]) == {0, 2}
    aside = list(shards.read_trees(folder, aside=True))
    assert [n for n, _ in aside] == [1, 3]
    _same(aside[1][1], rows[3].tree)
    table = pq.read_table(folder / "aside-00000.parquet").to_pydict()
    assert table["reason"] == ["refused: no method", "tolerance: bound 2"]
    assert table["label"] == [None, rows[3].priced.voc.tolist()]
    assert table["error"] == [None, rows[3].priced.error.tolist()]


def test_a_shard_may_hold_no_label_at_all(tmp_path):
    row = _rows("cold-store", 1)[0]
    folder = _dataset(tmp_path / "d", [Labelled(0, row.tree, row.query, None, "refused: x")])
    assert list(shards.read_trees(folder)) == []
    assert shards.read_candidates(folder)["label"].shape == (0,)


def test_same_rows_same_bytes(tmp_path):
    rows = _rows("shared-aisles", 3)
    a, b = _dataset(tmp_path / "a", rows), _dataset(tmp_path / "b", rows)
    for path in a.iterdir():
        assert path.read_bytes() == (b / path.name).read_bytes()


def test_every_column_states_meaning_and_unit(tmp_path):
    rows = _rows("cold-store", 2)
    rows[1] = Labelled(1, rows[1].tree, rows[1].query, None, "refused: x")
    folder = _dataset(tmp_path / "d", rows)
    for kind in ("trees", "candidates", "aside"):
        found = pq.read_schema(folder / f"{kind}-00000.parquet")
        about = json.loads(found.metadata[b"columns"])
        assert found.metadata[b"format"] == schema.DATASET_FORMAT.encode()
        assert list(about) == found.names
        for name in found.names:
            assert found.field(name).metadata[b"description"].decode() == about[name]
            assert len(about[name]) > 3
    for name in schema.LEAF_TABLE_UNITS:
        assert name in pq.read_schema(folder / "candidates-00000.parquet").names


# --- damage ----------------------------------------------------------------------------------------


@pytest.fixture
def folder(tmp_path):
    rows = _rows("cold-store", 4)
    return _dataset(tmp_path / "d", rows[:2], rows[2:])


@pytest.mark.parametrize("kind", ["trees", "candidates"])
@pytest.mark.parametrize("place", [0.0, 0.4, 0.999])
def test_a_flipped_bit_is_named_and_refused(folder, kind, place):
    path = folder / f"{kind}-00001.parquet"
    data = bytearray(path.read_bytes())
    data[int(place * len(data))] ^= 4
    path.write_bytes(data)
    for read in (shards.read_candidates, lambda f: list(shards.read_trees(f))):
        with pytest.raises(InputError, match=rf"{kind}-00001.parquet: must have the manifest's SHA-256"):
            read(folder)


def test_a_missing_shard_is_named_and_refused(folder):
    (folder / "candidates-00000.parquet").unlink()
    with pytest.raises(InputError, match=r"candidates-00000.parquet: is missing; the manifest lists it"):
        shards.read_candidates(folder)


def test_a_folder_without_manifest_is_refused(folder):
    (folder / "manifest.json").unlink()
    with pytest.raises(InputError, match=r"manifest.json: must be a readable file \(No such file"):
        shards.read_candidates(folder)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (b"{", "must be valid JSON"),
        (b"\xff", "must be valid JSON"),
        (b"[" * 100_000, "must be valid JSON"),
        (b"[]", r"format: must be 'voc-dataset/1'; got \[\]"),
        ({"format": "voc-dataset/2"}, "format: must be 'voc-dataset/1'; got 'voc-dataset/2'"),
        ({"complete": False}, "must be complete; 2 shards are there: run generate again"),
        ({"shards": 3}, "shards: must list"),
        ({"shards": [{"part": 0}]}, "shards: must list"),
        (
            {"shards": [{"part": 0, "trees": 1, "candidates": 1, "aside": 0, "files": {"../x": "0"}}]},
            "shards: must list",
        ),
    ],
)
def test_broken_manifests_are_refused(folder, change, message):
    path = folder / "manifest.json"
    if isinstance(change, bytes):
        path.write_bytes(change)
    else:
        path.write_text(json.dumps({**json.loads(path.read_text()), **change}))
    with pytest.raises(InputError, match=message) as e:
        shards.read_candidates(folder)
    assert "\n" not in str(e.value)


# --- other readers ---------------------------------------------------------------------------------


def test_pandas_reads_it(folder):
    pd = pytest.importorskip("pandas")
    frame = pd.read_parquet(folder / "candidates-00000.parquet")
    ours = shards.read_candidates(folder)
    assert frame["label"].tolist() == ours["label"][: len(frame)].tolist()
    trees = pd.read_parquet(folder / "trees-00000.parquet")
    assert len(trees["mean"][0]) == np.sum(np.array(trees["kind"][0]) == schema.LEAF)


def test_polars_reads_it(folder):
    pl = pytest.importorskip("polars")
    frame = pl.read_parquet(folder / "candidates-*.parquet")
    assert frame["label"].to_list() == shards.read_candidates(folder)["label"].tolist()


def test_duckdb_reads_it(folder):
    duckdb = pytest.importorskip("duckdb")
    pattern = (folder / "candidates-*.parquet").as_posix()
    total, most = duckdb.sql(f"select count(*), max(label) from '{pattern}'").fetchall()[0]
    ours = shards.read_candidates(folder)
    assert (total, most) == (len(ours["label"]), ours["label"].max())


def test_reading_holds_little_beyond_its_arrays(tmp_path):
    """Peak memory: the arrays that are returned, and about one shard on top."""
    rows = _rows("cold-store", 100)
    folder = _dataset(tmp_path / "d", *[rows[i : i + 10] for i in range(0, 100, 10)])
    shards.read_candidates(folder)  # imports and caches are no part of it
    before = pa.total_allocated_bytes()
    tracemalloc.start()
    found = shards.read_candidates(folder)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    size = sum(a.nbytes for a in found.values())
    assert peak < 1.5 * size + 100_000
    assert pa.total_allocated_bytes() - before < size / 5
