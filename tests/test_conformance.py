"""The conformance vectors: held by this package, by a second implementation, and missed by wrong answers."""

from __future__ import annotations

import copy
import json
import math
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from ladder import BACKUP_COMPILED

from distill import conformance, schema
from distill.conformance_vectors import NAME, make
from distill.errors import InputError, ScorerFileError

FOLDER = Path(__file__).parents[1] / "datasets" / "conformance"
VECTORS = FOLDER / NAME


@pytest.fixture(scope="module")
def vectors():
    return conformance.read_vectors(VECTORS)


def test_this_package_conforms():
    done = subprocess.run(
        [sys.executable, "-m", "distill.conformance", str(VECTORS)], capture_output=True, text=True
    )
    assert (done.returncode, done.stderr) == (0, "")
    assert "all answers conform" in done.stdout


def test_every_kind_of_tree_and_of_input_is_there(vectors):
    trees = [case["tree"] for case in vectors["cases"]]
    assert any("cov" in t for t in trees)
    assert any("alpha" in t for t in trees)
    assert any("chance" in t["kind"] for t in trees)
    assert {case["horizon"] for case in vectors["cases"]} >= {"inf", 0.0, 3.0}
    assert any(len(case["steps"]) > 1 for case in vectors["cases"])
    assert {len(entry["calls"][0]["inputs"]) for entry in vectors["scorers"]} == {8, 9, 10}


def wrong(vectors, change):
    answers = copy.deepcopy(vectors)
    change(answers)
    return conformance.compare(vectors, answers)


def test_wrong_answers_are_named(vectors):
    def answer(v, case=0, step=0):
        return v["cases"][case]["steps"][step]["answer"]

    def shift(x, at, by):
        x[at] += by

    assert conformance.compare(vectors, copy.deepcopy(vectors)) == []
    assert wrong(vectors, lambda v: shift(answer(v)["value"], 0, 1e-9)) == []
    (line,) = wrong(vectors, lambda v: shift(answer(v)["value"], 1, 1e-4))
    assert line.startswith("two leaves, step 0: value[1] must be")
    (line,) = wrong(vectors, lambda v: shift(answer(v, step=1)["rows"]["crossing"], 0, 1e-2))
    assert line.startswith("two leaves, step 1: crossing[0] must be")
    assert "no answer of the same form" in wrong(vectors, lambda v: v["cases"].pop())[0]
    assert "must have shape" in wrong(vectors, lambda v: answer(v)["var"].pop())[0]
    call = vectors["scorers"][0]["calls"][0]["answer"]

    def other_pick(v):
        v["scorers"][0]["calls"][0]["answer"]["pick"] = call["pick"] + 1

    assert f"pick must be {call['pick']}" in wrong(vectors, other_pick)[0]


def test_a_ports_answers_are_read_from_a_file(vectors, tmp_path):
    port = copy.deepcopy(vectors)
    port["cases"][2]["steps"][0]["answer"]["rows"]["slope"][0] = 9.0
    (tmp_path / "port.json").write_text(json.dumps(port))
    found = conformance.check(VECTORS, tmp_path / "port.json")
    assert len(found) == 1
    assert "slope[0]" in found[0]
    (tmp_path / "bad.json").write_text("{}")
    with pytest.raises(InputError, match="format: must be 'voc-conformance/1'"):
        conformance.check(VECTORS, tmp_path / "bad.json")
    with pytest.raises(InputError, match="must be a readable file"):
        conformance.check(VECTORS, tmp_path / "none.json")
    (tmp_path / "old.json").write_text(json.dumps({**port, "record_version": 0}))
    with pytest.raises(InputError, match=f"record_version: must be {schema.RECORD_VERSION}"):
        conformance.check(VECTORS, tmp_path / "old.json")


def test_a_changed_scorer_file_is_not_the_one_meant(tmp_path):
    for path in FOLDER.iterdir():
        if path.is_file():
            shutil.copy(path, tmp_path)
    data = bytearray((tmp_path / "record.onnx").read_bytes())
    data[-1] ^= 1
    (tmp_path / "record.onnx").write_bytes(data)
    with pytest.raises(ScorerFileError, match="SHA-256"):
        conformance.check(tmp_path / NAME)


# --- a second implementation, from the page alone -----------------------------------------------------


def cdf(x):
    return 0.5 * math.erfc(-x / math.sqrt(2))


def pdf(x):
    return math.exp(-x * x / 2) / math.sqrt(2 * math.pi)


def gain(x):
    """x Phi(x) + phi(x) without cancellation: integral of Phi, by its continued fraction far below 0."""
    if x > -5:
        return x * cdf(x) + pdf(x)
    t, mills = -x, 0.0
    for k in range(60, 0, -1):
        mills = k / (t + mills)
    mills = 1 / (t + mills)
    return pdf(x) * (1 - t * mills)


def inverse_gain(y):
    low, high = -38.0, max(1.0, y + 1)
    for _ in range(200):
        middle = (low + high) / 2
        low, high = (middle, high) if gain(middle) < y else (low, middle)
    return high


def maximum(children, without=None):
    """Mean and variance of the maximum of independent normals, of all or all but one.

    One and two in closed form; three and more by the table, and then all but one on the same table.
    """
    kept = [x for i, x in enumerate(children) if i != without]
    if len(kept) == 1:
        return kept[0]
    if len(children) == 2:
        (a, v), (b, w) = sorted(children, reverse=True)
        theta = math.sqrt(v + w)
        if theta == 0:
            return a, 0.0
        p = (a - b) / theta
        mean = a + theta * gain(-p)
        second = v * cdf(p) + (w + (a - b) ** 2) * cdf(-p) - (a - b) * theta * pdf(p)
        return mean, second - (mean - a) ** 2
    cells = 24
    sd = [math.sqrt(v) or 1e-150 for _, v in children]
    low = max(m - 7 * s for (m, _), s in zip(children, sd, strict=True))
    high = max(m + 4.5 * s for (m, _), s in zip(children, sd, strict=True))
    width, first, second = high - low, 0.0, 0.0
    for i in range(cells):
        t = (i + 0.5) / cells
        rest = 1 - math.prod(
            max(cdf((low + width * t - m) / s), 1e-300)
            for j, ((m, _), s) in enumerate(zip(children, sd, strict=True))
            if j != without
        )
        first += rest / cells
        second += 2 * t * rest / cells
    second -= 1 / (12 * cells**2)
    return low + width * first, max(width**2 * (second - first**2), 0.0)


class Port:
    """Moments up and crossings down of trees with independent leaves, dynamic value, one number at a time."""

    def __init__(self, tree, belief):
        self.tree, self.n = tree, len(tree["parent"])
        self.belief = belief
        self.kids = [[c for c in range(self.n) if tree["parent"][c] == p] for p in range(self.n)]
        self.rows = {}

    def of(self, name, c, default):
        column = self.tree.get(name)
        return default if column is None or column[c] is None else column[c]

    def edges(self, c):
        """(node, gain, reward) of the children of c, through decision nodes below a decision node."""
        found = []
        for k in self.kids[c]:
            p = self.of("prob", k, 1.0)
            gain_, reward = p * self.of("discount", k, 1.0), p * self.of("reward", k, 0.0)
            if c and self.tree["kind"][c] == self.tree["kind"][k] == "decision":
                found += [(n, gain_ * g, reward + gain_ * r) for n, g, r in self.edges(k)]
            else:
                found.append((k, gain_, reward))
        return found

    def moments(self, c):
        if self.tree["kind"][c] == "leaf":
            return self.belief[c][:2]
        parts = [self.seen(e) for e in self.edges(c)]
        if self.tree["kind"][c] == "chance":
            return sum(m for m, _ in parts), sum(v for _, v in parts)
        return maximum(parts)

    def seen(self, edge):
        node, g, r = edge
        m, v = self.moments(node)
        return r + g * m, g * g * v

    def down(self, c, move, slope, now):
        if self.tree["kind"][c] == "leaf":
            self.rows[c] = (move, slope, now)
            return
        edges = self.edges(c)
        parts = [self.seen(e) for e in edges]
        for i, (node, g, _) in enumerate(edges):
            rest = parts[:i] + parts[i + 1 :]
            if self.tree["kind"][c] == "chance" or not rest:
                self.down(node, move / (g or 1), slope * g, now * g)
                continue
            mu, r2 = maximum(parts, i)
            theta = math.sqrt(parts[i][1] + r2)
            x = inverse_gain(max((self.moments(c)[0] + move - mu) / theta, 1e-300))
            p = (parts[i][0] - mu) / theta
            self.down(node, theta * (x - p) / (g or 1), slope * cdf(x) * g, now * cdf(p) * g)

    def answer(self):
        actions = self.edges(0)
        value = [self.seen(e)[0] for e in actions]
        for i, (node, g, _) in enumerate(actions):
            rest = value[:i] + value[i + 1 :]
            self.down(node, (max(rest) - value[i]) / g if rest else 0.0, g if rest else 0.0, g)
        return value


def beliefs(tree, updates):
    """Mean, variance and noise ratio of each leaf node."""
    columns = {k: list(tree[k]) for k in ("mean", "var", "noise_var", "alpha", "beta") if k in tree}
    leaves = [c for c, kind in enumerate(tree["kind"]) if kind == "leaf"]
    for update in updates:
        for name, x in update.items():
            if name != "leaf":
                columns[name][leaves[update["leaf"]]] = x
    out = {}
    for c in leaves:
        if "mean" in columns:
            m, v, n = (columns[k][c] for k in ("mean", "var", "noise_var"))
            out[c] = (m, v, n / v if v else 1e18)
        else:
            a, b = columns["alpha"][c], columns["beta"][c]
            span, n = tree["high"][c] - tree["low"][c], a + b
            out[c] = (tree["low"][c] + span * a / n, span**2 * a * b / n**2 / (n + 1), n)
    return out


def test_a_second_implementation_gives_the_same_values_and_rows(vectors):
    compared = 0
    for case in vectors["cases"]:
        tree = case["tree"]
        if case["horizon"] != "inf" or "cov" in tree:
            continue
        for j, step in enumerate(case["steps"]):
            belief = beliefs(tree, [s["update"] for s in case["steps"][1 : j + 1]])
            port = Port(tree, belief)
            answer = copy.deepcopy(step["answer"])
            answer["value"] = port.answer()
            for i, c in enumerate(belief):
                move, slope, now = port.rows[c]
                sd = math.sqrt(belief[c][1])
                row = {"crossing": move / sd if sd else 0.0, "slope": slope * sd, "noise_ratio": belief[c][2]}
                row["now"] = now / slope if slope else 0.0
                for name, x in row.items():
                    answer["rows"][name][i] = x
            got = {"cases": [{"steps": [{"answer": answer}]}], "scorers": []}
            want = {"cases": [{"name": case["name"], "steps": [step]}], "scorers": []}
            assert conformance.compare(want, got) == [], case["name"]
            compared += len(belief)
    assert compared > 50


@pytest.mark.slow
def test_made_anew_they_have_the_same_cases_and_conform(vectors, tmp_path):
    again = conformance.read_vectors(make(tmp_path))
    for a, b in zip(vectors["cases"], again["cases"], strict=True):
        assert a["name"] == b["name"]
        assert a["tree"] == b["tree"]
        np.testing.assert_allclose(
            a["steps"][0]["answer"]["value"], b["steps"][0]["answer"]["value"], rtol=BACKUP_COMPILED
        )
    assert conformance.check(tmp_path / NAME) == []
