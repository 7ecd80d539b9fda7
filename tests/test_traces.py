from __future__ import annotations

import gzip
import io
import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from distill.cli import run
from distill.errors import InputError
from distill.family import draw, load_family
from distill.record import to_record
from distill.traces import BadLines, read_trees, write_trees

FAMILIES = Path(__file__).parent.parent / "datasets" / "families"


@pytest.fixture(scope="module")
def trees():
    return [
        draw(load_family(FAMILIES / f"{name}.toml"), 0, i)
        for name in ("cold-store", "shared-aisles", "crossing-traffic", "on-time")
        for i in range(5)
    ]


def _records(found):
    return [to_record(tree) for _, tree in found]


@pytest.mark.parametrize("suffix", [".jsonl", ".jsonl.gz"])
def test_trees_come_back_bit_for_bit(tmp_path, trees, suffix):
    path = tmp_path / f"a{suffix}"
    assert write_trees(path, trees) == len(trees)
    assert _records(read_trees(path)) == [to_record(t) for t in trees]
    first = path.read_bytes()
    write_trees(path, iter(trees))
    assert path.read_bytes() == first
    assert list(tmp_path.iterdir()) == [path]


def test_places_name_file_and_line_and_blank_lines_count(tmp_path, trees):
    path = tmp_path / "a.jsonl"
    lines = [json.dumps(to_record(t)) for t in trees[:3]]
    path.write_text(f"{lines[0]}\n\n  \n{lines[1]}\r\n{lines[2]}")  # no line end at the end
    assert [place for place, _ in read_trees(path)] == [f"{path} line {n}" for n in (1, 4, 5)]


def test_json_files_hold_one_record_or_an_array(tmp_path, trees):
    path = tmp_path / "a.json"
    path.write_text(json.dumps(to_record(trees[0]), indent=2))
    assert [place for place, _ in read_trees(path)] == [str(path)]
    path.write_text(json.dumps([to_record(t) for t in trees]))
    assert _records(read_trees(path)) == [to_record(t) for t in trees]
    path.write_text(json.dumps([to_record(trees[0]), 7]))
    with pytest.raises(InputError, match=r"a.json \[1\]: record: must be a JSON object; got 7"):
        list(read_trees(path))


def test_standard_input(monkeypatch, trees):
    data = "".join(json.dumps(to_record(t)) + "\n" for t in trees).encode()
    monkeypatch.setattr(sys, "stdin", io.TextIOWrapper(io.BytesIO(data + b"{}\n")))
    found = []
    with pytest.raises(InputError, match=rf"standard input line {len(trees) + 1}: format: is missing"):
        found += read_trees("-")
    monkeypatch.setattr(sys, "stdin", io.TextIOWrapper(io.BytesIO(data)))
    assert _records(read_trees("-")) == [to_record(t) for t in trees]


def test_bad_lines_are_handed_over_with_their_number(tmp_path, trees):
    good = json.dumps(to_record(trees[0]))
    path = tmp_path / "a.jsonl"
    path.write_bytes(b"\n".join([good.encode(), b"{", b"\xff\xfe", b"[]", good.encode(), b"[" * 50_000]))
    errors = []
    assert len(list(read_trees(path, on_error=errors.append))) == 2
    assert [str(e).split(": ")[0] for e in errors] == [f"{path} line {n}" for n in (2, 3, 4, 6)]
    assert "must be UTF-8 text" in str(errors[1])
    with pytest.raises(InputError, match=r"a.jsonl line 2: column \d: must be valid JSON"):
        list(read_trees(path))


def test_a_record_rule_is_named_with_its_line(tmp_path, trees):
    record = to_record(trees[0])
    record["var"] = [None if v is None else -1 for v in record["var"]]
    path = tmp_path / "a.jsonl"
    path.write_text(json.dumps(to_record(trees[1])) + "\n" + json.dumps(record))
    with pytest.raises(InputError, match=r"a.jsonl line 2: var\[\d+\]: must be >= 0; got -1.0"):
        list(read_trees(path))


@pytest.mark.parametrize(
    ("name", "data", "message"),
    [
        ("a.csv", b"1,2", "must end in .jsonl, .jsonl.gz, .json"),
        ("a.jsonl", b"", "must hold at least one record; it is empty"),
        ("a.jsonl", b"\n \n", "must hold at least one record; it is empty"),
        ("a.json", b"  ", "must hold at least one record; it is empty"),
        ("a.json", b"[]", "must hold at least one record; it is empty"),
        ("a.jsonl.gz", b"", "must hold at least one record; it is empty"),
        ("a.jsonl.gz", b"{}\n", "line 1: gzip: must be whole"),
        ("a.json", b"{", "must be valid JSON"),
    ],
)
def test_unreadable_sources_are_named(tmp_path, name, data, message):
    (tmp_path / name).write_bytes(data)
    with pytest.raises(InputError) as e:
        list(read_trees(tmp_path / name))
    assert message in str(e.value)
    assert name in str(e.value)


def test_missing_files_and_folders_are_named(tmp_path):
    with pytest.raises(InputError, match=r"b.jsonl: must be a readable file \(No such file"):
        list(read_trees(tmp_path / "b.jsonl"))
    (tmp_path / "c.jsonl").mkdir()
    with pytest.raises(InputError, match=r"c.jsonl: must be a readable file \(Is a directory"):
        list(read_trees(tmp_path / "c.jsonl"))


def test_a_torn_gzip_file_gives_what_is_whole(tmp_path, trees):
    """As a crash leaves it: every record before the tear is read, the tear is named."""
    path = tmp_path / "a.jsonl.gz"
    blocks = [gzip.compress(json.dumps(to_record(t)).encode() + b"\n") for t in trees[:3]]
    path.write_bytes(blocks[0] + blocks[1] + blocks[2][:-20])
    errors = []
    found = list(read_trees(path, on_error=errors.append))
    assert len(found) == 2
    assert len(errors) == 1
    assert "line 3: gzip: must be whole" in str(errors[0])


@pytest.mark.parametrize("fill", [b" ", b"\n", b"1"])
def test_gzip_bombs_are_refused_early(tmp_path, trees, fill):
    path = tmp_path / "a.jsonl.gz"
    good = json.dumps(to_record(trees[0])).encode() + b"\n"
    path.write_bytes(gzip.compress(good + fill * 60_000_000))
    errors = []
    assert len(list(read_trees(path, on_error=errors.append))) == 1
    assert len(errors) == 1
    rule = "more than 100000 blank lines" if fill == b"\n" else "not unpack to more than 200 times"
    assert rule in str(errors[0])


def test_only_json_lines_are_written(tmp_path, trees):
    with pytest.raises(InputError, match=r"a.csv: must end in .jsonl or .jsonl.gz"):
        write_trees(tmp_path / "a.csv", trees)
    assert not list(tmp_path.iterdir())


def _mutants(trees, n):
    """Lines damaged in the ways that files get damaged, and in some that only malice would."""
    rng = np.random.default_rng(0)
    junk = [None, "x", [], {}, True, -1, 1e308, 10**400, 0.5, "inf", [[]], 2**63]
    for _ in range(n):
        record = to_record(trees[rng.integers(len(trees))])
        how = rng.integers(7)
        keys = list(record)
        key = keys[rng.integers(len(keys))]
        if how == 0:
            record[key] = junk[rng.integers(len(junk))]
        elif how == 1:
            del record[key]
        elif how == 2 and isinstance(record[key], list):
            record[key][rng.integers(len(record[key]))] = junk[rng.integers(len(junk))]
        elif how == 3:
            other = keys[rng.integers(len(keys))]
            record[key], record[other] = record[other], record[key]
        line = bytearray(json.dumps(record).encode())
        if how == 4:
            del line[rng.integers(len(line)) :]
        elif how == 5:
            for _ in range(3):
                line[rng.integers(len(line))] = rng.integers(256)
        elif how == 6:
            at = rng.integers(len(line))
            line[at:at] = b"[" * int(rng.integers(1, 3000))
        yield bytes(line).replace(b"\n", b" ") or b"{"


# --- damaged lines through the command line --------------------------------------------------------

# Peak memory of a whole process that reads hostile traces; imports alone take a good 200 MB.
_MOST_MEMORY = 700 * 2**20
_MEASURED = """
import sys
from distill.cli import run
code = run(sys.argv[1:])
# As peak_memory says it, whose folder is not on the path here.
peak = next(line for line in open("/proc/self/status") if line.startswith("VmHWM:"))
print(int(peak.split()[1]) * 1024, file=sys.stderr)
sys.exit(code)
"""


def _command(*argv, timeout=120):
    """Exit code, standard output and error, and peak memory of a command in a process of its own."""
    done = subprocess.run(
        [sys.executable, "-c", _MEASURED, *map(str, argv)], capture_output=True, text=True, timeout=timeout
    )
    *said, peak = done.stderr.splitlines()
    assert not any("Traceback" in line for line in said)
    return done.returncode, done.stdout, "\n".join(said), int(peak)


def _damage(how, line, record, rng):
    """One line, damaged in one way."""
    at = int(rng.integers(1, len(line)))
    columns = [k for k, v in record.items() if isinstance(v, list) and k not in ("parent", "kind", "cov")]
    key = columns[rng.integers(len(columns))]
    leaf = record["kind"].index("leaf")
    if how == "truncated":
        return line[:at]
    if how == "wrong types":
        record[key] = ["x", 3, {}, [[]], True][rng.integers(5)]
    elif how == "swapped columns":
        record["parent"], record[key] = record[key], record["parent"]
    elif how == "huge numbers":
        huge = ["1e999", "-1e400", str(10**400), "9" * 5000, "NaN"][rng.integers(5)]
        record[key][leaf] = "huge"
        return json.dumps(record).replace('"huge"', huge).encode()
    elif how == "invalid UTF-8":
        return line[:at] + b"\xff\xfe" + line[at:]
    elif how == "deep nesting":
        record["extra"] = "deep"
        deep = int(rng.integers(5_000, 60_000))
        return json.dumps(record).replace('"deep"', '{"a":' * deep + "1" + "}" * deep).encode()
    elif how == "unknown keys":
        record["moon"] = 1
    return json.dumps(record).encode()


_DAMAGES = (
    "truncated", "wrong types", "swapped columns", "huge numbers", "invalid UTF-8", "deep nesting",
    "unknown keys",
)  # fmt: skip


def test_two_thousand_damaged_lines_are_counted_with_their_numbers(tmp_path, trees, capsys):
    """Between them stand sound lines, which are all priced."""
    rng = np.random.default_rng(4)
    lines, sound = [], []
    for i in range(2000):
        record = to_record(trees[i % len(trees)])
        line = json.dumps(record).encode()
        lines.append(_damage(_DAMAGES[i % len(_DAMAGES)], line, record, rng).replace(b"\n", b" "))
        if i % 100 == 0:
            lines.append(line)
            sound.append(len(lines))
    path = tmp_path / "damaged.jsonl.gz"
    # Stored, not packed: so deep a nesting packs better than any trace, and would be taken for a bomb.
    path.write_bytes(gzip.compress(b"\n".join(lines), compresslevel=0))
    code, out, err, peak = _command("price", path, "--value", "static", "--skip-bad")
    assert code == 0
    assert len(out.splitlines()) == len(sound)
    assert err.startswith("voc-distill: 2,000 bad records passed over\n")
    told = err.rpartition(f"{path} lines ")[2].split(", ")
    numbers = {
        n for part in told for a, _, b in [part.partition("-")] for n in range(int(a), int(b or a) + 1)
    }
    assert numbers == set(range(1, len(lines) + 1)) - set(sound)
    assert peak < _MOST_MEMORY
    assert run(["price", str(path), "--value", "static"]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert "line 1:" in err
    assert err.count("\n") == 1


BOMBS = {
    "blanks": (b" ", 100_000_000),
    "line ends": (b"\n", 100_000_000),
    "arrays": (b"[", 100_000_000),
    "numbers": (b"1,", 50_000_000),
    "nesting": (b'{"a":', 9_000_000),
}


@pytest.mark.slow
@pytest.mark.parametrize("bomb", BOMBS)
def test_bombs_cost_neither_time_nor_memory(tmp_path, trees, bomb):
    good = json.dumps(to_record(trees[0])).encode() + b"\n"
    path = tmp_path / "bomb.jsonl.gz"
    path.write_bytes(gzip.compress(good + BOMBS[bomb][0] * BOMBS[bomb][1], compresslevel=1))
    code, out, err, peak = _command("price", path, "--value", "static", "--skip-bad")
    assert code == 0
    assert len(out.splitlines()) == 1
    assert err.startswith("voc-distill: 1 bad record passed over\n")
    assert peak < _MOST_MEMORY


LONG_LINES = {
    "numbers": lambda: b"[" + b"1.5," * 16_000_000 + b"1]",
    "objects": lambda: b"[" + b"{}," * 20_000_000 + b"1]",
    "arrays": lambda: b"[" + b"[]," * 20_000_000 + b"1]",
    "nesting": lambda: b'{"a":' * 12_000_000,
    "keys": lambda: b"{" + b",".join(b'"%d":1' % i for i in range(4_500_000)) + b"}",
}


@pytest.mark.slow
@pytest.mark.parametrize("line", LONG_LINES)
def test_long_lines_are_not_parsed_beyond_what_records_need(tmp_path, trees, line):
    """60 MB of marks would be gigabytes of objects."""
    good = json.dumps(to_record(trees[0])).encode() + b"\n"
    path = tmp_path / "long.jsonl"
    path.write_bytes(good + LONG_LINES[line]())
    code, out, err, peak = _command("price", path, "--value", "static", "--skip-bad")
    assert (code, len(out.splitlines())) == (0, 1)
    assert "must not hold" in err
    assert peak < _MOST_MEMORY


def test_strict_stops_where_traces_are_read(tmp_path, capsys):
    """Each command that reads traces, at the first bad line; without the flag it goes on."""
    path = tmp_path / "t.jsonl"
    sound = [draw(load_family(FAMILIES / "cold-store.toml"), 0, i) for i in range(6)]
    lines = [json.dumps(to_record(t)) for t in sound]
    path.write_text("\n".join([lines[0], "{", *lines[1:], "]"]))
    ways = {
        "price": (["price", path, "--value", "static"], ["--skip-bad"]),
        "infer": (["infer", path, "--out", tmp_path / "f.toml"], []),
        "generate": (["generate", "--traces", path, "--out", tmp_path / "d", "--workers", 1], []),
    }
    for name, (argv, _) in ways.items():
        assert run([*map(str, argv), "--strict"]) == 2, name
        err = capsys.readouterr().err
        assert "line 2:" in err
        assert err.count("\n") == 1
        assert not (tmp_path / "f.toml").exists()
        assert not (tmp_path / "d").exists()
    for name, (argv, lenient) in ways.items():
        assert run([*map(str, argv), *lenient]) == 0, name
        err = capsys.readouterr().err
        assert "2 bad records passed over" in err
        assert "line 2:" in err
        assert "line 8:" in err


def test_reports_of_bad_lines_stay_short():
    bad = BadLines()
    for n in range(1, 100_001):
        bad(InputError(f"night.jsonl line {2 * n}: var[{n}]", "must be >= 0", -1.0))
    report = bad.report()
    assert report.startswith("100,000 bad records passed over\n")
    assert "lines 2, 4, 6" in report
    assert report.endswith("and 90,000 more")
    assert len(report) < 80_000


def _survive(tmp_path, trees, n):
    path = tmp_path / "a.jsonl"
    lines = list(_mutants(trees, n))
    path.write_bytes(b"\n".join(lines))
    errors = []
    good = list(read_trees(path, on_error=errors.append))
    assert len(good) + len(errors) == n
    assert len(errors) > n / 2
    numbers = sorted(
        [int(p.rsplit(" ", 1)[1]) for p, _ in good]
        + [int(str(e).split(" line ")[1].split(":")[0]) for e in errors]
    )
    assert numbers == list(range(1, n + 1))
    for e in errors:
        assert len(str(e)) < 400
        assert "\n" not in str(e)


def test_damaged_lines_are_each_named(tmp_path, trees):
    _survive(tmp_path, trees, 400)


@pytest.mark.slow
def test_many_damaged_lines_are_each_named(tmp_path, trees):
    _survive(tmp_path, trees, 5000)
