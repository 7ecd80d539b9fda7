"""Hostile and damaged scorer files: each is refused with its reason before onnxruntime runs it."""

from __future__ import annotations

import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import onnx
import pytest
from hostile_files import HOSTILE, model
from hypothesis import given, settings
from hypothesis import strategies as st
from onnx import helper, numpy_helper
from scorers import KINDS, scorer_bytes

from distill import scorer_file
from distill.errors import ScorerFileError
from distill.onnx_reader import read_model
from distill.runtime import Scorer
from distill.scorer_shapes import OPERATORS


@pytest.mark.parametrize("name", HOSTILE)
def test_a_hostile_file_is_refused_with_its_reason(name):
    change, word, kind = HOSTILE[name]
    m = model(kind)
    change(m)
    started = time.process_time()
    with pytest.raises(ScorerFileError, match=word) as caught:
        Scorer.from_bytes(m.SerializeToString())
    assert time.process_time() - started < 1
    assert "\n" not in str(caught.value)


def test_there_are_enough_hostile_files():
    assert len(HOSTILE) >= 40


@pytest.mark.parametrize("kind", KINDS)
def test_a_true_file_passes(kind):
    facts = scorer_file.check(scorer_bytes(kind))
    assert facts["format"] == "voc-scorer/2"


def test_bytes_that_are_no_model_are_refused():
    for data in (
        b"",
        b"\0",
        b"PK\x03\x04",
        b"<html>",
        bytes(range(256)),
        b"\x3a\xff\xff\xff\xff\xff\xff\xff\xff\xff\x7f",
    ):
        with pytest.raises(ScorerFileError):
            Scorer.from_bytes(data)


def test_size_and_number_of_fields_are_bounded():
    with pytest.raises(ScorerFileError, match=r"at most .* bytes"):
        Scorer.from_bytes(bytes(scorer_file.MAX_BYTES + 1))
    started = time.process_time()
    with pytest.raises(ScorerFileError, match="fields"):
        Scorer.from_bytes(b"\x08\x0a" * (scorer_file.MAX_BYTES // 2))
    assert time.process_time() - started < 1


def test_every_truncation_is_refused():
    data = scorer_bytes("linear")
    for end in range(0, len(data), max(1, len(data) // 400)):
        with pytest.raises(ScorerFileError):
            scorer_file.check(data[:end])


@settings(deadline=None, max_examples=40, derandomize=True)
@given(st.integers(0, 2**32 - 1), st.sampled_from(KINDS))
def test_flipped_bytes_are_refused_or_harmless(seed, kind):
    """No crash, no hang, and whatever passes the checks still answers or is refused by the self-test."""
    rng = np.random.default_rng(seed)
    data = bytearray(scorer_bytes(kind))
    for _ in range(int(rng.integers(1, 6))):
        data[rng.integers(len(data))] = rng.integers(256)
    try:
        scorer = Scorer.from_bytes(bytes(data))
    except ScorerFileError as e:
        assert len(str(e)) < 400
        return
    case = scorer.facts["self_test"][0]["inputs"]
    assert len(scorer.score(**{k: np.asarray(v) for k, v in case.items()}).voc) == len(case["mean"])


def test_the_reader_reads_what_onnx_reads():
    for kind in KINDS:
        m, got = model(kind), read_model(scorer_bytes(kind))
        assert [n.op for n in got.nodes] == [n.op_type for n in m.graph.node]
        assert [n.inputs for n in got.nodes] == [list(n.input) for n in m.graph.node]
        for c in m.graph.initializer:
            np.testing.assert_array_equal(got.constants[c.name], numpy_helper.to_array(c))
        assert got.metadata == {p.key: p.value for p in m.metadata_props}
        for a, b in zip(got.nodes, m.graph.node, strict=True):
            for x in b.attribute:
                value = helper.get_attribute_value(x)
                if isinstance(value, onnx.TensorProto):
                    value = numpy_helper.to_array(value)
                if isinstance(value, bytes):
                    value = value.decode()
                np.testing.assert_array_equal(a.attributes[x.name], value)


def test_the_shapes_worked_out_are_those_that_onnx_infers():
    for kind in KINDS:
        m = onnx.shape_inference.infer_shapes(model(kind), strict_mode=True, data_prop=True)
        read = read_model(scorer_bytes(kind))
        shapes = {i.name: i.shape for i in read.inputs} | {k: v.shape for k, v in read.constants.items()}
        inferred = {
            v.name: tuple(d.dim_value or "n" for d in v.type.tensor_type.shape.dim)
            for v in m.graph.value_info
        }
        checked = 0
        for node in read.nodes:
            name = f"{node.domain}:{node.op}" if node.domain else node.op
            constants = [read.constants.get(v) for v in node.inputs]
            shape = OPERATORS[name][1](node, [shapes[v] for v in node.inputs], constants)
            for v in node.outputs:
                shapes[v] = shape
                if v in inferred:
                    assert shape == inferred[v], (name, v)
                    checked += 1
        assert checked > 80


def test_refusals_stay_small_in_memory():
    """Every hostile file in one process: the peak stays within 200 MB of an idle one's."""
    code = """
import sys
sys.path.insert(0, "tests")
import hostile_files as t
from peak_memory import peak_mb
from distill.errors import ScorerFileError
from distill.runtime import Scorer
files = []
for change, _, kind in t.HOSTILE.values():
    m = t.model(kind); change(m); files.append(m.SerializeToString())
before = peak_mb()
for data in files:
    try:
        Scorer.from_bytes(data)
    except ScorerFileError:
        continue
    raise SystemExit("accepted")
print(peak_mb() - before)
"""
    done = subprocess.run(
        [sys.executable, "-c", code],
        capture_output=True,
        text=True,
        check=False,
        cwd=Path(__file__).parents[1],
    )
    assert done.returncode == 0, done.stderr
    assert float(done.stdout) < 200
