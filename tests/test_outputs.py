"""What commands write over: never an input or somebody's own work; always what they left themselves."""

from __future__ import annotations

import gzip
import json
import os
import shutil
import socket
from pathlib import Path

import pytest
from builders import flat_record

from distill.cli import run
from distill.commands import outputs
from distill.errors import InputError

ROOT = Path(__file__).parents[1]


@pytest.fixture
def place(tmp_path: Path) -> Path:
    """A folder with one of each: traces, a scorer with its sheet, a dataset, a front, hand-made files."""
    lines = "".join(json.dumps(flat_record(id=i, remaining=20)) + "\n" for i in range(3))
    (tmp_path / "trees.jsonl").write_text(lines)
    (tmp_path / "packed.jsonl.gz").write_bytes(gzip.compress(lines.encode()))
    for suffix in (".onnx", ".json", ".md"):
        shutil.copy(ROOT / "models" / f"cold-store-fast{suffix}", tmp_path / f"s{suffix}")
    shutil.copytree(ROOT / "datasets" / "sample", tmp_path / "data")
    trained = tmp_path / "trained"
    trained.mkdir()
    shutil.copy(ROOT / "models" / "cold-store.onnx", trained / "dense-32-32.onnx")
    (trained / "front.json").write_text('{"format": "voc-front/1"}')
    (tmp_path / "hand.toml").write_text('format = "tree-family/1"\n')
    (tmp_path / "hand.html").write_text("<!DOCTYPE html><title>mine</title>")
    (tmp_path / "hand.json").write_text('{"format": "mine", "shifts": {}}')
    (tmp_path / "hand.txt").write_text("mine\n")
    audited = tmp_path / "audited"
    audited.mkdir()
    shutil.copy(tmp_path / "packed.jsonl.gz", audited / "worth-adding.jsonl.gz")
    (audited / "audit.json").write_text('{"format": "voc-audit/1"}')
    (tmp_path / "tour").mkdir()
    (tmp_path / "tour" / "summary.json").write_text("{}")
    (tmp_path / "linked.jsonl").symlink_to(tmp_path / "trees.jsonl")
    return tmp_path


def held(folder: Path) -> dict[str, bytes]:
    """Every file of a folder, by its path."""
    return {str(p.relative_to(folder)): p.read_bytes() for p in sorted(folder.rglob("*")) if p.is_file()}


INPUTS = "must be another file than the input"
INSIDE = "which is an input"
FOREIGN = "it holds something else"
RECORD = "record --simulator taxi --decisions 1"


@pytest.mark.parametrize(
    ("command", "told"),
    [
        ("price trees.jsonl --out trees.jsonl", INPUTS),
        ("price trees.jsonl --out linked.jsonl", INPUTS),
        ("price trees.jsonl --out packed.jsonl.gz", FOREIGN),
        ("price trees.jsonl --out hand.txt", FOREIGN),
        ("price trees.jsonl --out s.onnx", FOREIGN),
        ("infer packed.jsonl.gz --out new.toml --page packed.jsonl.gz", INPUTS),
        ("infer packed.jsonl.gz --out new.toml --page new.toml", "which is written too"),
        ("infer packed.jsonl.gz --out hand.toml", FOREIGN),
        ("infer packed.jsonl.gz --out new.toml --page hand.html", FOREIGN),
        ("look data --page data/manifest.json", INSIDE),
        ("look data --page data/page.html", INSIDE),
        ("look data --page s.json", FOREIGN),
        ("report s.json --out s.json", INPUTS),
        ("report trained --out trained/front.json", INSIDE),
        ("report s.json --out s.onnx", FOREIGN),
        ("validate s.onnx data --out s.onnx", INPUTS),
        ("validate s.onnx data --out data/manifest.json", INSIDE),
        ("validate s.onnx data --out s.json", FOREIGN),
        ("validate s.onnx data --out hand.json", FOREIGN),
        ("validate s.onnx data --out trees.jsonl", FOREIGN),
        ("ship trained --out trained/dense-32-32.onnx", INSIDE),
        ("ship trained --out hand.json", "out: must end in .onnx"),
        ("ship trained --out hand.onnx", "hand.json: must be a scorer's sheet"),
        ("audit s.onnx audited/worth-adding.jsonl.gz --out audited", INPUTS),
        ("audit s.onnx trees.jsonl --dataset data --out data", INSIDE),
        ("rehearse --quick --out tour", "summary.json: must be an earlier rehearsal's"),
        (f"{RECORD} --out trees.jsonl", "records are never written over"),
        (f"{RECORD} --out packed.jsonl.gz", "records are never written over"),
    ],
)
def test_an_input_or_other_work_is_told_and_stays(
    command: str, told: str, place: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(place)
    before = held(place)
    assert run(command.split()) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.startswith("voc-distill: error: ")
    assert err.count("\n") == 1
    assert told in err
    assert held(place) == before


def test_what_is_no_file_is_refused_before_any_work(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    os.mkfifo(tmp_path / "pipe")
    with socket.socket(socket.AF_UNIX) as server:
        server.bind(str(tmp_path / "socket"))
        with pytest.raises(SystemExit):
            run(["price", "none.jsonl", "--out", str(tmp_path / "socket")])
    assert "--out: must be a regular file, a pipe or a new name" in capsys.readouterr().err
    (tmp_path / "loop").symlink_to("loop")
    assert run(["price", "none.jsonl", "--out", str(tmp_path / "loop")]) == 2
    assert "Too many levels of symbolic links" in capsys.readouterr().err
    # A pipe may be written through: the command goes on to its input, which is not there.
    assert run(["price", "none.jsonl", "--out", str(tmp_path / "pipe")]) == 2
    assert "none.jsonl" in capsys.readouterr().err


@pytest.mark.parametrize(
    "command",
    [
        "price trees.jsonl --out priced.jsonl",
        "price trees.jsonl --table --out priced.txt",
        "price trees.jsonl --out /dev/null",
        "look data --page look.html",
    ],
)
def test_the_same_command_may_be_given_again(
    command: str, place: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(place)
    out = place / command.split()[-1]
    for _ in range(2):
        assert run(command.split()) == 0
    if not out.is_char_device():
        assert out.stat().st_size > 0
        out.write_text("mine\n")
        assert run(command.split()) == 2
        out.write_text("")  # as mktemp leaves it
        assert run(command.split()) == 0


def test_a_tour_replaces_an_earlier_one_alone(place: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    done: list[Path] = []
    monkeypatch.setattr("distill.tour.tour", done.append)
    (place / "s.onnx").rename(place / "scorer.onnx")
    assert run(["tour", str(place)]) == 2  # somebody's own
    (place / "data").rename(place / "dataset")
    assert run(["tour", str(place)]) == 0  # of a tour that was stopped
    (place / "summary.json").write_text('{"labels": {}, "scorer": {}, "on traces": {}}')
    (place / "summary.md").write_text("# voc-distill: the whole job on a cold store's pallet shuttle\n")
    assert run(["tour", str(place)]) == 0
    for name in ("summary.json", "summary.md", "report.html"):
        before = (place / name).read_bytes() if (place / name).exists() else b""
        (place / name).write_text("{}")
        assert run(["tour", str(place)]) == 2
        (place / name).write_bytes(before)
    assert done == 2 * [place]


def test_every_kind_knows_its_own(place: Path) -> None:
    """Files that the slower commands leave: a scorer with its sheet, an audit, figures, a family."""
    (place / "figures.json").write_text('{"part": "all", "accuracy": {}, "beside": {}}')
    (place / "shifts.json").write_text('{"shifts": {}}')
    (place / "inferred.toml").write_text("# Inferred from 3 recorded trees of 3 decisions.\n")
    own = {
        "s.onnx": outputs.SCORER,
        "s.json": outputs.SHEET,
        "s.md": outputs.SHEET_PAGE,
        "audited/audit.json": outputs.AUDIT,
        "audited/worth-adding.jsonl.gz": outputs.WORTH_ADDING,
        "figures.json": outputs.FIGURES,
        "shifts.json": outputs.FIGURES,
        "inferred.toml": outputs.FAMILY,
        "trained/front.json": outputs.FRONT,
    }
    for name, kind in own.items():
        outputs.check_outputs([(place / name, kind)], [])
        for other, of in own.items():
            if of is not kind:
                with pytest.raises(InputError, match=FOREIGN):
                    outputs.check_outputs([(place / other, kind)], [])
