"""The command line: outputs, and one clear line with exit code 2 for what is wrong."""

from __future__ import annotations

import argparse
import gzip
import importlib
import io
import json
import math
import re
import subprocess
import sys

import numpy as np
import pytest
from builders import chance_record, flat_record, win_loss_record
from test_family import BAD as MALFORMED_FAMILIES
from test_family import family_text
from test_record import BAD_TEXT, MALFORMED

from distill import voc
from distill.__main__ import main
from distill.cli import run
from distill.commands import record
from distill.commands.flags import microseconds
from distill.query import Query
from distill.record import from_record
from distill.rehearse.catalogue import SIMULATORS
from distill.rehearse.plans import plan


@pytest.fixture
def trees(tmp_path):
    path = tmp_path / "trees.jsonl"
    path.write_text("\n".join(json.dumps(flat_record(id=i, remaining=20)) for i in range(2)) + "\n")
    return path


def refused(capsys, *argv):
    """The one line of an exit with code 2; nothing on standard output."""
    assert run([str(a) for a in argv]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.startswith("voc-distill: error: ")
    assert err.count("\n") == 1
    return err


def test_price_writes_the_fixed_keys(trees, capsys):
    assert run(["price", str(trees)]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert len(lines) == 2
    got = json.loads(lines[1])
    assert set(got) == {"voc", "batch", "value", "error", "best", "method", "id"}
    expected = voc.price(from_record(flat_record()), Query())
    assert got["voc"] == expected.voc.tolist()
    assert got["value"] == expected.value.tolist()
    assert got["batch"] == [1, 1, 1]
    assert got["best"] == int(np.argmax(expected.voc))
    assert got["id"] == 1


@pytest.mark.parametrize(
    ("flags", "query"),
    [
        (["--value", "static"], Query(0.0)),
        (["--value", "2.5", "--batch", "3"], Query(2.5, 3)),
        (["--rate"], Query(math.inf, None, 20)),
        (["--rate", "--remaining", "4", "--value", "static"], Query(0.0, None, 4)),
    ],
)
def test_price_flags_ask_the_engine(trees, capsys, flags, query):
    assert run(["price", str(trees), *flags]) == 0
    got = json.loads(capsys.readouterr().out.splitlines()[0])
    expected = voc.price(from_record(flat_record()), query)
    assert got["voc"] == expected.voc.tolist()
    assert got["batch"] == expected.batch.tolist()


def test_a_flag_beats_the_record_and_the_record_the_default(tmp_path, capsys):
    path = tmp_path / "one.json"
    path.write_text(json.dumps(flat_record(horizon=0, batch=7), indent=2))
    for flags, query in (([], Query(0.0, 7)), (["--value", "dynamic", "--batch", "2"], Query(math.inf, 2))):
        assert run(["price", str(path), *flags]) == 0
        expected = voc.price(from_record(flat_record()), query)
        assert json.loads(capsys.readouterr().out)["voc"] == expected.voc.tolist()


def test_best_counts_the_cost(tmp_path, capsys):
    path = tmp_path / "one.jsonl"
    free = voc.price(from_record(flat_record()), Query(math.inf, 3)).voc
    dear = [None, None, 0.0, 0.0, 0.0]
    dear[2 + int(np.argmax(free))] = 1e3
    path.write_text(json.dumps(flat_record(cost=dear)))
    assert run(["price", str(path), "--batch", "3"]) == 0
    assert json.loads(capsys.readouterr().out)["best"] == int(np.argsort(free)[-2])


def test_price_reads_standard_input_and_gz(trees, tmp_path, capsys, monkeypatch):
    assert run(["price", str(trees)]) == 0
    expected = capsys.readouterr().out
    packed = tmp_path / "trees.jsonl.gz"
    packed.write_bytes(gzip.compress(trees.read_bytes()))
    assert run(["price", str(packed)]) == 0
    assert capsys.readouterr().out == expected
    monkeypatch.setattr(sys, "stdin", io.TextIOWrapper(io.BytesIO(trees.read_bytes())))
    assert run(["price", "-"]) == 0
    assert capsys.readouterr().out == expected


def test_price_table_marks_the_best_leaf(trees, capsys):
    assert run(["price", str(trees), "--table", "--rate"]) == 0
    out = capsys.readouterr().out
    assert out.count("<- best") == 2
    assert "dynamic VOC a rollout, best batch" in out
    assert out.count("net: VOC less what a rollout there costs") == 2
    assert run(["price", str(trees), "--table", "--batch", "4"]) == 0
    assert capsys.readouterr().out.count("net: VOC less what the rollouts there cost\n") == 2


@pytest.mark.parametrize("name", MALFORMED)
def test_malformed_record_exits_2_and_writes_nothing(tmp_path, capsys, name):
    path, out = tmp_path / "bad.jsonl", tmp_path / "out.jsonl"
    path.write_text(json.dumps(flat_record()) + "\n" + json.dumps(MALFORMED[name][0]) + "\n")
    assert "line 2" in refused(capsys, "price", path, "--out", out)
    assert not out.exists()


@pytest.mark.parametrize("name", [n for n in BAD_TEXT if n != "empty"])
def test_malformed_text_exits_2(tmp_path, capsys, name):
    text = BAD_TEXT[name][0]
    path = tmp_path / "bad.jsonl"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    assert "line 1" in refused(capsys, "price", path)


@pytest.mark.parametrize("name", MALFORMED_FAMILIES)
def test_malformed_family_exits_2_and_makes_no_folder(tmp_path, capsys, name):
    change, _ = MALFORMED_FAMILIES[name]
    path, out = tmp_path / "bad.toml", tmp_path / "dataset"
    path.write_text(change if isinstance(change, str) else family_text(**change))
    refused(capsys, "generate", "--family", path, "--trees", 5, "--out", out)
    assert not out.exists()


def test_refusals_name_the_case(tmp_path, capsys):
    assert "No such file" in refused(capsys, "price", tmp_path / "none.jsonl")
    (tmp_path / "empty.jsonl").write_text("")
    assert "empty.jsonl" in refused(capsys, "price", tmp_path / "empty.jsonl")
    no_budget = tmp_path / "no_budget.jsonl"
    no_budget.write_text(json.dumps(flat_record()))
    assert "remaining: must be given for a rate" in refused(capsys, "price", no_budget, "--rate")
    assert "must be a .toml file or one of" in refused(
        capsys, "generate", "--family", "frozen-pizza", "--trees", 1, "--out", tmp_path / "d"
    )
    assert "must be a folder that train left" in refused(
        capsys, "ship", tmp_path, "--out", tmp_path / "s.onnx"
    )
    assert "none.onnx" in refused(capsys, "validate", tmp_path / "none.onnx", tmp_path)
    assert "simulator" in refused(
        capsys, "record", "--simulator", "chess", "--decisions", 1, "--out", tmp_path / "t.jsonl"
    )


@pytest.mark.parametrize(
    "record", [chance_record(), win_loss_record(), flat_record(var=None, cov=np.eye(3).tolist())]
)
def test_every_kind_of_tree_is_priced_or_refused_by_name(tmp_path, capsys, record):
    """Never approximated silently: a sampling method says so in its name."""
    path = tmp_path / "one.jsonl"
    path.write_text(json.dumps(record))
    code = run(["price", str(path)])
    out, err = capsys.readouterr()
    if code == 0:
        assert json.loads(out)["method"]
    else:
        assert code == 2
        assert err.count("\n") == 1


def test_tolerance_is_honoured_or_refused(trees, capsys):
    assert run(["price", str(trees), "--tolerance", "1e-6"]) == 0
    capsys.readouterr()
    assert "tolerance" in refused(capsys, "price", trees, "--tolerance", "1e-40")


@pytest.mark.parametrize(
    "argv",
    [
        ["price", "x", "--value", "-1"],
        ["price", "x", "--value", "nan"],
        ["price", "x", "--batch", "0"],
        ["price", "x", "--batch", "2", "--rate"],
        ["price", "x", "--remaining", "1.5"],
        ["price", "x", "--tolerance", "0"],
        ["ship", "d", "--out", "s.onnx", "--latency", "fast"],
        [],
        ["haul"],
    ],
)
def test_bad_flags_exit_2(argv, capsys):
    with pytest.raises(SystemExit) as caught:
        run(argv)
    err = capsys.readouterr().err
    assert caught.value.code == 2
    assert err.startswith("voc-distill: error: ")
    assert err.count("\n") == 1


def test_module_runs_from_anywhere(tmp_path, trees):
    done = subprocess.run(
        [sys.executable, "-m", "distill", "price", str(trees)],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        check=True,
    )
    assert len(done.stdout.splitlines()) == 2


@pytest.mark.parametrize(
    "argv",
    [
        ["price", "{trees}", "--out", "{folder}"],
        ["price", "{trees}", "--out", "{trees}/below"],
        ["infer", "{trees}", "--out", "{new}", "--page", "{trees}/page.html"],
        ["generate", "--traces", "{trees}", "--out", "{trees}"],
        ["audit", "models/cold-store.onnx", "{trees}", "--out", "{trees}"],
        ["validate", "models/cold-store.onnx", "--shift", "cold-store", "--out", "{trees}/figures.json"],
        ["tour", "{trees}"],
    ],
)
def test_places_that_cannot_be_written_are_told_before_any_work(trees, tmp_path, capsys, argv):
    names = {"trees": trees, "folder": tmp_path, "new": tmp_path / "new.toml"}
    with pytest.raises(SystemExit) as done:
        run([word.format(**names) for word in argv])
    out, err = capsys.readouterr()
    assert done.value.code == 2
    assert out == ""
    assert err.startswith("voc-distill: error: argument ")
    assert err.count("\n") == 1
    assert "must" in err
    assert [path.name for path in tmp_path.iterdir()] == ["trees.jsonl"]


@pytest.mark.usefixtures("trees")
def test_a_folder_of_something_else_is_not_filled(tmp_path, capsys):
    err = refused(capsys, "generate", "--family", "cold-store", "--trees", "3", "--out", tmp_path)
    assert "must be empty or hold a manifest.json" in err
    assert "trees.jsonl" in err
    assert [path.name for path in tmp_path.iterdir()] == ["trees.jsonl"]


def test_several_files_are_priced_in_order(trees, capsys):
    assert run(["price", str(trees), str(trees)]) == 0
    assert [json.loads(line)["id"] for line in capsys.readouterr().out.splitlines()] == [0, 1, 0, 1]


def test_additions_say_how_many_trees_were_new(trees, tmp_path, capsys):
    data = str(tmp_path / "data")
    assert run(["generate", "--traces", str(trees), "--out", data, "--workers", "1"]) == 0
    capsys.readouterr()
    more = tmp_path / "more.jsonl"
    other = flat_record(remaining=20, mean=[None, None, 0.1, 0.4, 0.6])
    more.write_text(trees.read_text() + json.dumps(other) + "\n")
    assert run(["generate", "--add", str(more), "--out", data, "--workers", "1"]) == 0
    assert capsys.readouterr().out.startswith("3 trees given, 1 of them new and labelled")


# --- what is wrong is said as the user gave it ------------------------------------------------------


def test_a_record_that_cannot_be_priced_as_asked_is_passed_over_too(tmp_path, capsys):
    path = tmp_path / "mixed.jsonl"
    records = [flat_record(id=0, remaining=20), flat_record(id=1), flat_record(id=2, remaining=20)]
    path.write_text("\n".join(map(json.dumps, records)) + "\n{\n")
    assert run(["price", str(path), "--rate", "--skip-bad"]) == 0
    out, err = capsys.readouterr()
    assert [json.loads(line)["id"] for line in out.splitlines()] == [0, 2]
    assert "2 bad records passed over" in err
    assert "line 2: remaining: must be given for a rate" in err
    assert "line 2" in refused(capsys, "price", path, "--rate")
    path.write_text(json.dumps(records[1]))
    assert "all 1 are bad" in refused(capsys, "price", path, "--rate", "--skip-bad")
    # A method that cannot do it is no reason to stop either.
    path.write_text("\n".join(map(json.dumps, records)))
    told = refused(capsys, "price", path, "--tolerance", "1e-40", "--skip-bad")
    assert "all 3 are bad" in told


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ('{"format": "belief-tree/1", "parent": true}', "got true"),
        ('{"format": null}', "got null"),
        (
            '{"format": "belief-tree/1", "parent": [null, true]}',
            "parent[0]: must be a whole number; got null",
        ),
        ("[1, [true, null]]", "must be a JSON object; got"),
        (json.dumps(flat_record()).encode("utf-16"), "UTF-8 text; this looks like UTF-16"),
        (json.dumps(flat_record()).encode("utf-16-le"), "UTF-8 text; this looks like UTF-16"),
    ],
)
def test_a_bad_record_is_shown_as_it_stands_in_its_file(text, told, tmp_path, capsys):
    path = tmp_path / "bad.jsonl"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    assert told in refused(capsys, "price", path)


def test_a_byte_order_mark_of_utf_8_is_no_fault(tmp_path, capsys):
    path = tmp_path / "marked.jsonl"
    path.write_bytes(json.dumps(flat_record()).encode("utf-8-sig"))
    assert run(["price", str(path)]) == 0
    assert json.loads(capsys.readouterr().out)["voc"]


def test_what_is_no_scorer_or_no_figures_is_named(tmp_path, capsys):
    for data in (b"# a page\n", b"\xd2\x07 not at all"):
        (tmp_path / "s.md").write_bytes(data)
        assert "s.md: is no ONNX file" in refused(capsys, "validate", tmp_path / "s.md", tmp_path)
    (tmp_path / "v.json").write_text('{"accuracy": {}, "beside": {}}')
    (tmp_path / "w.json").write_text('{"format": "voc-sheet/1"}')
    for name, told in (
        ("v.json", "v.json: must hold the figures of train"),
        ("w.json", "w.json: file: is missing"),
    ):
        assert told in refused(capsys, "report", tmp_path / name, "--out", tmp_path / "p.html")


def test_a_full_disk_behind_standard_output_is_named(trees):
    with open("/dev/full", "w") as full:  # noqa: PTH123
        done = subprocess.run(
            [sys.executable, "-m", "distill", "price", str(trees)],
            stdout=full, stderr=subprocess.PIPE, text=True, check=False,
        )  # fmt: skip
    assert done.returncode == 2
    assert done.stderr == "voc-distill: error: standard output: No space left on device\n"


@pytest.mark.parametrize(
    ("text", "us"),
    [("40us", 40.0), ("40", 40.0), ("1ms", 1e3), ("2.5 ms", 2.5e3), ("1e-3s", 1e3), ("7µs", 7)],
)
def test_times_take_their_units(text, us):
    assert microseconds(text) == pytest.approx(us)


@pytest.mark.parametrize("text", ["0us", "-1ms", "fast", "1h", "", "us", "1e999s", "nan", "1 2"])
def test_what_is_no_time_is_shown_as_given(text):
    with pytest.raises(argparse.ArgumentTypeError, match=re.escape(f"such as 40us; got {text!r}")):
        microseconds(text)


def test_a_file_where_a_folder_is_wanted_is_told_as_one(trees, capsys):
    with pytest.raises(SystemExit):
        run(["generate", "--family", "cold-store", "--trees", "3", "--out", str(trees)])
    assert "--out: must be a folder, and a file is there; got " in capsys.readouterr().err


def test_a_light_installation_is_told_where_the_extra_comes_from(capsys, monkeypatch):
    def missing(*_):
        raise ModuleNotFoundError("No module named 'sklearn'", name="sklearn")

    monkeypatch.setattr("distill.cli.run", missing)
    assert main() == 2
    err = capsys.readouterr().err
    assert "pip install '.[train]' in a checkout" in err
    assert "install 'voc-distill" not in err


# --- what help says --------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "name",
    [
        "price",
        "infer",
        "generate",
        "look",
        "train",
        "ship",
        "validate",
        "audit",
        "report",
        "record",
        "rehearse",
        "tour",
    ],
)
def test_help_tells_every_default(name):
    parser = argparse.ArgumentParser()
    importlib.import_module(f"distill.commands.{name}").add_arguments(parser)
    for action in parser._actions:
        if action.default not in (None, False, [], argparse.SUPPRESS):
            assert "default" in (action.help or ""), action.dest
        assert action.help or action.required, action.dest


def test_help_tells_the_sizes_of_rehearsals(capsys, monkeypatch):
    monkeypatch.setenv("COLUMNS", "200")  # no text broken at a hyphen
    with pytest.raises(SystemExit):
        run(["rehearse", "--help"])
    told = " ".join(capsys.readouterr().out.split())
    own, quick = plan(None, problems=["taxi"], budgets=["8"]), plan("quick")
    assert own.seeds == plan("full").seeds
    assert f"decisions a cell (default {own.seeds}, --quick {quick.seeds})" in told
    assert f"(default {own.tuning_seeds}, --quick {quick.tuning_seeds})" in told


def test_help_names_the_simulators_that_there_are():
    assert record._SIMULATORS.split(", ") == list(SIMULATORS)


def test_a_number_of_trees_without_families_to_draw_from_is_refused(capsys):
    err = refused(capsys, "validate", "models/cold-store.onnx", "datasets/sample", "--trees", "5")
    assert "--trees: must come with --shift" in err
