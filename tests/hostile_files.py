"""Hostile scorer files: a true one, changed in one way each, and the reason it must be refused for."""

from __future__ import annotations

import json

import numpy as np
import onnx
from onnx import TensorProto, helper, numpy_helper
from scorers import scorer_bytes


def model(kind="dense"):
    return onnx.load_model_from_string(scorer_bytes(kind))


def node_of(m, op):
    return next(n for n in m.graph.node if n.op_type == op)


def attribute(node, name):
    return next(a for a in node.attribute if a.name == name)


def constant_of(m, name):
    return next(c for c in m.graph.initializer if c.name == name)


def replace(m, name, value):
    constant_of(m, name).CopyFrom(numpy_helper.from_array(value, name))


def insert(m, *nodes, constants=()):
    """Nodes put first, so that they may read inputs."""
    old = list(m.graph.node)
    del m.graph.node[:]
    m.graph.node.extend([*nodes, *old])
    m.graph.initializer.extend(numpy_helper.from_array(np.asarray(v), k) for k, v in constants)


def put_metadata(m, key, text):
    for p in m.metadata_props:
        if p.key == key:
            p.value = text
            return
    m.metadata_props.add(key=key, value=text)


HOSTILE = {}


def hostile(word, kind="dense"):
    def register(change):
        HOSTILE[change.__name__] = (change, word, kind)
        return change

    return register


@hostile("ir_version")
def other_ir_version(m):
    m.ir_version = 11


@hostile("operator sets")
def other_opset(m):
    m.opset_import[0].version = 21


@hostile("operator sets")
def custom_domain(m):
    m.opset_import.append(helper.make_opsetid("com.evil", 1))


@hostile("operator sets")
def doubled_opset(m):
    m.opset_import.append(helper.make_opsetid("", 18))


@hostile("field 25 has no place")
def local_function(m):
    m.functions.append(helper.make_function("f", "F", ["a"], ["b"], [], [helper.make_opsetid("", 18)]))


@hostile("'ConstantOfShape': is not allowed")
def four_terabytes(m):
    insert(
        m,
        helper.make_node("ConstantOfShape", ["huge"], ["blown"]),
        constants=[("huge", np.array([2**20, 2**20], dtype=np.int64))],
    )


@hostile("'Expand': is not allowed")
def expand(m):
    insert(
        m,
        helper.make_node("Expand", ["var", "huge"], ["blown"]),
        constants=[("huge", np.array([2**40, 1], dtype=np.int64))],
    )


@hostile("'Tile': is not allowed")
def tile(m):
    insert(
        m,
        helper.make_node("Tile", ["var", "huge"], ["blown"]),
        constants=[("huge", np.array([2**40], dtype=np.int64))],
    )


def body():
    """A loop's body that goes on for ever."""
    return helper.make_graph(
        [helper.make_node("Identity", ["c"], ["d"])],
        "body",
        [
            helper.make_tensor_value_info("i", TensorProto.INT64, []),
            helper.make_tensor_value_info("c", TensorProto.BOOL, []),
        ],
        [helper.make_tensor_value_info("d", TensorProto.BOOL, [])],
    )


@hostile("field 6 has no place")
def endless_loop(m):
    insert(m, helper.make_node("Loop", ["", ""], ["x"], body=body()))


@hostile("field 6 has no place")
def branch(m):
    insert(m, helper.make_node("If", ["worth_it"], ["x"], then_branch=body(), else_branch=body()))


@hostile("is not allowed")
def unknown_operator(m):
    insert(m, helper.make_node("Nothing", ["var"], ["x"]))


@hostile("is not allowed")
def operator_of_another_domain(m):
    insert(m, helper.make_node("Add", ["var", "var"], ["x"], domain="com.microsoft"))


@hostile("shape .* is not allowed")
def square_of_the_leaves(m):
    insert(
        m,
        helper.make_node("Unsqueeze", ["var", "axis1"], ["column"]),
        helper.make_node("Mul", ["column", "var"], ["square"]),
        constants=[("axis1", np.array([1], dtype=np.int64))],
    )


@hostile("is not allowed|more than")
def doubling(m):
    """Sixty concatenations, each twice as wide."""
    nodes = [helper.make_node("Unsqueeze", ["var", "axis1"], ["w0"])]
    nodes += [helper.make_node("Concat", [f"w{i}", f"w{i}"], [f"w{i + 1}"], axis=1) for i in range(60)]
    insert(m, *nodes, constants=[("axis1", np.array([1], dtype=np.int64))])


@hostile("at most 1000 nodes")
def too_many_nodes(m):
    insert(m, *(helper.make_node("Sqrt", ["var"], [f"r{i}"]) for i in range(1000)))


@hostile("more than .* numbers a leaf")
def too_wide(m):
    insert(
        m,
        helper.make_node("Unsqueeze", ["var", "axis1"], ["w"]),
        *(helper.make_node("Mul", ["w", "row"], [f"w{i}"]) for i in range(20)),
        constants=[("axis1", np.array([1], dtype=np.int64)), ("row", np.zeros((1, 2000)))],
    )


@hostile("field 13 has no place")
def external_data(m):
    c = m.graph.initializer[0]
    c.ClearField("raw_data")
    c.external_data.add(key="location", value="/etc/passwd")


@hostile("field 14 has no place")
def external_location(m):
    m.graph.initializer[0].data_location = TensorProto.EXTERNAL


@hostile("field 15 has no place")
def sparse(m):
    values = numpy_helper.from_array(np.ones(1, dtype=np.float32), "s")
    m.graph.sparse_initializer.append(
        helper.make_sparse_tensor(values, helper.make_tensor("i", TensorProto.INT64, [1], [0]), [2**40])
    )


@hostile("must hold .* bytes")
def shape_without_data(m):
    m.graph.initializer[0].dims[:] = [2**31, 2**31]


@hostile("none negative")
def negative_dimension(m):
    m.graph.initializer[0].dims[:] = [-1]


@hostile("field 6 has no place")
def text_tensor(m):
    m.graph.initializer.append(helper.make_tensor("t", TensorProto.STRING, [1], [b"x"]))


@hostile("must be finite")
def not_a_number_weight(m):
    weights = next(c for c in m.graph.initializer if c.name.startswith("e_weights"))
    replace(m, weights.name, numpy_helper.to_array(weights) * np.float32(np.nan))


@hostile("must not stand for")
def constant_for_an_input(m):
    m.graph.initializer.append(numpy_helper.from_array(np.zeros(3), "mean"))


@hostile("has a name of its own|must have a name of its own")
def constant_twice(m):
    m.graph.initializer.append(m.graph.initializer[0])


@hostile("input 'password'")
def another_input(m):
    m.graph.input.append(helper.make_tensor_value_info("password", TensorProto.DOUBLE, ["n"]))


@hostile("input 'cost': is missing")
def missing_input(m):
    keep = [i for i in m.graph.input if i.name != "cost"]
    del m.graph.input[:]
    m.graph.input.extend(keep)


@hostile("input 'mean': must have element type")
def input_of_other_type(m):
    m.graph.input[0].type.tensor_type.elem_type = TensorProto.FLOAT


@hostile("input 'mean': must have element type")
def input_of_fixed_size(m):
    m.graph.input[0].type.tensor_type.shape.dim[0].dim_value = 2**40


@hostile("output 'extra'")
def another_output(m):
    m.graph.output.append(helper.make_tensor_value_info("extra", TensorProto.DOUBLE, ["n"]))


@hostile("output 'worth_it': is missing")
def missing_output(m):
    keep = [o for o in m.graph.output if o.name != "worth_it"]
    del m.graph.output[:]
    m.graph.output.extend(keep)


@hostile("output 'voc_high': is missing")
def no_upper_bound(m):
    keep = [o for o in m.graph.output if o.name != "voc_high"]
    del m.graph.output[:]
    m.graph.output.extend(keep)


@hostile("output 'voc_high': has no place")
def upper_bound_in_the_format_before(m):
    put_metadata(m, "format", "voc-scorer/1")


@hostile("output 'pick': must have")
def output_of_absurd_count(m):
    o = next(o for o in m.graph.output if o.name == "pick")
    o.type.tensor_type.shape.dim.add(dim_value=2**40)


@hostile("must be a new name")
def written_twice(m):
    m.graph.node.append(m.graph.node[0])


@hostile("not computed before it")
def cycle(m):
    m.graph.node[0].input[0] = "voc"


@hostile("attribute 'noop_with_empty_axes' is not allowed")
def unforeseen_attribute(m):
    node_of(m, "ReduceMax").attribute.append(helper.make_attribute("noop_with_empty_axes", 1))


@hostile("must point onward", "boosting")
def tree_cycle(m):
    node = node_of(m, "TreeEnsemble")
    leafs, ids = attribute(node, "nodes_trueleafs").ints, attribute(node, "nodes_truenodeids").ints
    ids[list(leafs).index(0)] = 0


@hostile("must be from 0 to 3", "boosting")
def feature_out_of_range(m):
    attribute(node_of(m, "TreeEnsemble"), "nodes_featureids").ints[0] = 10**9


@hostile("inputs or attributes do not fit", "boosting")
def feature_just_beyond_the_columns_there_are(m):
    """The learner's ensemble has three columns; that of the bounds has a fourth."""
    attribute(node_of(m, "TreeEnsemble"), "nodes_featureids").ints[0] = 3


@hostile("must point to a node or leaf|must be from", "boosting")
def leaf_out_of_range(m):
    node = node_of(m, "TreeEnsemble")
    leafs, ids = attribute(node, "nodes_trueleafs").ints, attribute(node, "nodes_truenodeids").ints
    ids[list(leafs).index(1)] = 10**6


@hostile("leaf_weights: must be finite", "boosting")
def not_a_number_leaf(m):
    t = attribute(node_of(m, "TreeEnsemble"), "leaf_weights").t
    values = numpy_helper.to_array(t).copy()
    values[3] = np.nan
    t.CopyFrom(numpy_helper.from_array(values, t.name))


@hostile("nodes_splits: must have", "boosting")
def splits_cut_off(m):
    t = attribute(node_of(m, "TreeEnsemble"), "nodes_splits").t
    t.CopyFrom(numpy_helper.from_array(numpy_helper.to_array(t)[:-1], t.name))


@hostile("aggregate_function", "boosting")
def averaged(m):
    attribute(node_of(m, "TreeEnsemble"), "aggregate_function").i = 0


@hostile("tree_roots", "boosting")
def root_out_of_range(m):
    attribute(node_of(m, "TreeEnsemble"), "tree_roots").ints[0] = -1


@hostile("metadata 'self_test': is missing")
def no_self_test(m):
    keep = [(p.key, p.value) for p in m.metadata_props if p.key != "self_test"]
    del m.metadata_props[:]
    for key, value in keep:
        m.metadata_props.add(key=key, value=value)


@hostile("format must be")
def other_format(m):
    put_metadata(m, "format", "voc-scorer/99")


@hostile("metadata 'about': must be JSON")
def no_json(m):
    put_metadata(m, "about", "{")


@hostile("metadata 'about': must be JSON")
def deep_json(m):
    put_metadata(m, "about", "[" * 100_000 + "]" * 100_000)


@hostile("metadata 'ranges': must be JSON")
def json_of_nan(m):
    put_metadata(m, "ranges", '{"x": [NaN, 1]}')


@hostile("metadata must be at most")
def huge_metadata(m):
    put_metadata(m, "about", json.dumps("x" * (5 * 2**20)))


@hostile("metadata 'secret': has no place")
def other_metadata(m):
    put_metadata(m, "secret", "1")


@hostile("must not occur twice")
def metadata_twice(m):
    m.metadata_props.add(key="format", value="voc-scorer/1")


@hostile("self-test case 0 gives other values")
def other_weights(m):
    weights = next(c for c in m.graph.initializer if c.name.startswith("e_weights2"))
    replace(m, weights.name, numpy_helper.to_array(weights) * np.float32(1.5))


@hostile("self-test case 0 cannot be run")
def self_test_without_inputs(m):
    put_metadata(m, "self_test", '[{"inputs": {}, "outputs": {}}]')


@hostile("self-test case 0 cannot be run")
def self_test_of_no_objects(m):
    put_metadata(m, "self_test", "[1]")


@hostile("onnxruntime refuses it|inputs or attributes do not fit")
def wrong_types(m):
    node_of(m, "Erf").input[0] = "action"
