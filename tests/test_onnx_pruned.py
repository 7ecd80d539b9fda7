"""Scorer files cut down to their pick: what is left, and that it answers as the whole file does."""

from __future__ import annotations

import numpy as np
import onnx
import onnxruntime as ort
import pytest
from leaf_tables import rows
from scorers import KINDS, scorer_bytes

from distill.onnx_pruned import pruned
from distill.onnx_reader import read_model
from distill.runtime import Scorer


def session(data: bytes) -> ort.InferenceSession:
    options = ort.SessionOptions()
    options.intra_op_num_threads = 1
    return ort.InferenceSession(data, options, providers=["CPUExecutionProvider"])


@pytest.mark.parametrize("kind", KINDS)
def test_the_pick_alone_is_a_clean_model_of_fewer_nodes(kind):
    whole = onnx.load_model_from_string(scorer_bytes(kind))
    part = onnx.load_model_from_string(pruned(scorer_bytes(kind), ("pick", "in_range")))
    onnx.checker.check_model(part, full_check=True)
    assert {o.name for o in part.graph.output} == {"pick", "in_range"}
    kept = [n.name for n in part.graph.node]
    assert kept == [n.name for n in whole.graph.node if n.name in set(kept)]
    assert len(kept) < len(whole.graph.node)
    assert list(part.graph.input) == list(whole.graph.input)
    assert part.metadata_props == whole.metadata_props


@pytest.mark.parametrize("kind", KINDS)
def test_all_outputs_give_the_whole_file_byte_for_byte(kind):
    data = scorer_bytes(kind)
    names = [o.name for o in onnx.load_model_from_string(data).graph.output]
    assert pruned(data, names) == data


def test_a_length_of_more_than_64_bits_is_what_the_check_took_it_for():
    """In ten bytes a whole number has room for 70 bits; what lies beyond the 64th falls away."""
    data = scorer_bytes("linear")
    graph = len(onnx.load_model_from_string(data).graph.SerializeToString(deterministic=True))
    length = bytes([graph & 0x7F | 0x80, graph >> 7])
    assert data.count(b"\x3a" + length) == 1  # field 7 of the model, in bytes
    longer = bytes([length[0], length[1] | 0x80, *[0x80] * 7, 0x7E])
    odd = data.replace(b"\x3a" + length, b"\x3a" + longer)
    assert len(read_model(odd).nodes) == len(read_model(data).nodes)
    assert pruned(odd, ("pick", "in_range")) == pruned(data, ("pick", "in_range"))


@pytest.mark.parametrize("kind", KINDS)
def test_a_pick_is_that_of_the_whole_score(kind):
    scorer = Scorer.from_bytes(scorer_bytes(kind))
    columns = rows(np.random.default_rng(8), 40)
    for tree in range(40):
        mine = columns["tree"] == tree
        one = {k: v[mine] for k, v in columns.items() if k not in ("tree", "remaining")}
        left = float(columns["remaining"][mine][0])
        assert scorer.pick(**one, remaining=left) == scorer.score(**one, remaining=left).pick
