"""Shapes of every value of a scorer file, worked out without running it; floor 2, light.

A dimension is a whole number or "n", the leaves of a call. Each operator that a scorer may use has one
rule here; what a rule does not know, such as a second "n" in one shape, is refused. So the memory of a
call is at most a fixed number of bytes a leaf, whatever the file says.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from distill.errors import ScorerFileError
from distill.onnx_reader import Model, Node

__all__ = ["OPERATORS", "check_shapes"]

Dim = int | str
Shape = tuple[Dim, ...]
Shapes = Sequence[Shape]
Consts = Sequence[NDArray[Any] | None]
Rule = Callable[[Node, Shapes, Consts], Shape]

_N: Final = "n"
_MAX_DIM: Final = 2048
_MAX_WIDTH: Final = 16_384  # numbers a leaf over all values of a call


def check_shapes(model: Model) -> None:
    """Refuse a model whose values could take shapes that its rules do not foresee; ScorerFileError."""
    shapes: dict[str, Shape] = {info.name: info.shape for info in model.inputs}
    shapes |= {name: array.shape for name, array in model.constants.items()}
    width = 0
    for node in model.nodes:
        name = f"{node.domain}:{node.op}" if node.domain else node.op
        attributes, rule = OPERATORS[name]
        for attribute in node.attributes:
            if node.op != "TreeEnsemble" and attribute not in attributes:
                raise ScorerFileError(f"operator {name!r}: attribute {attribute!r} is not allowed")
        constants = [model.constants.get(value) for value in node.inputs]
        try:
            shape = rule(node, [shapes[value] for value in node.inputs], constants)
        except (IndexError, TypeError, ValueError, KeyError):
            raise ScorerFileError(f"operator {name!r}: inputs or attributes do not fit") from None
        if len(shape) > 2 or sum(d == _N for d in shape) > 1:
            raise _refused(name, shape)
        if any(isinstance(d, int) and not 1 <= d <= _MAX_DIM for d in shape):
            raise _refused(name, shape)
        for value in node.outputs:
            shapes[value] = shape
            width += _count(shape)[0]
        if width > _MAX_WIDTH:
            raise ScorerFileError(f"needs more than {_MAX_WIDTH} numbers a leaf")
    for info in model.outputs:
        if shapes[info.name] != info.shape:
            raise ScorerFileError(f"output {info.name!r}: has shape {shapes[info.name]}, not {info.shape}")


def _refused(name: str, shape: Shape) -> ScorerFileError:
    return ScorerFileError(f"operator {name!r}: a value of shape {shape} is not allowed")


def _count(shape: Shape) -> tuple[int, int]:
    """(c, k): the shape holds c n^k numbers."""
    c, k = 1, 0
    for d in shape:
        if isinstance(d, int):
            c *= d
        else:
            k += 1
    return c, k


def _same(node: Node, shapes: Shapes, _: Consts) -> Shape:
    _arity(node, shapes, 1)
    return shapes[0]


def _broadcast(node: Node, shapes: Shapes, _: Consts) -> Shape:
    """NumPy's rule; "n" meets only "n" and 1."""
    _arity(node, shapes, 2)
    a, b = shapes
    rank = max(len(a), len(b))
    a, b = (1,) * (rank - len(a)) + a, (1,) * (rank - len(b)) + b
    out: list[Dim] = []
    for x, y in zip(a, b, strict=True):
        if x != y and 1 not in (x, y):
            raise ValueError
        out.append(y if x == 1 else x)
    return tuple(out)


def _where(node: Node, shapes: Shapes, _: Consts) -> Shape:
    _arity(node, shapes, 3)
    two = Node(outputs=["_"])
    return _broadcast(two, (_broadcast(two, shapes[:2], ()), shapes[2]), ())


def _clip(node: Node, shapes: Shapes, _: Consts) -> Shape:
    if len(shapes) not in (2, 3) or len(node.outputs) != 1 or any(s != () for s in shapes[1:]):
        raise ValueError
    return shapes[0]


def _unsqueeze(node: Node, shapes: Shapes, constants: Consts) -> Shape:
    _arity(node, shapes, 2)
    (axis,) = _list(constants[1])
    if len(shapes[0]) != 1 or axis not in (0, 1):
        raise ValueError
    return (1, shapes[0][0]) if axis == 0 else (shapes[0][0], 1)


def _reshape(node: Node, shapes: Shapes, constants: Consts) -> Shape:
    """To one free dimension beside ones: what moves n numbers between (n,), (1, n) and (n, 1)."""
    _arity(node, shapes, 2)
    target = _list(constants[1])
    if target.count(-1) != 1 or any(d not in (-1, 1) for d in target):
        raise ValueError
    c, k = _count(shapes[0])
    if k > 1 or (k == 1 and c != 1):
        raise ValueError
    free: Dim = _N if k else c
    return tuple(free if d == -1 else 1 for d in target)


def _transpose(node: Node, shapes: Shapes, _: Consts) -> Shape:
    _arity(node, shapes, 1)
    if _list(node.attributes["perm"]) != [1, 0]:
        raise ValueError
    a, b = shapes[0]
    return b, a


def _concat(node: Node, shapes: Shapes, _: Consts) -> Shape:
    axis = node.attributes["axis"]
    if axis not in (0, 1) or not shapes or any(len(s) != 2 for s in shapes):
        raise ValueError
    other = {s[1 - axis] for s in shapes}
    along = [s[axis] for s in shapes]
    if len(other) != 1 or not all(isinstance(d, int) for d in along):
        raise ValueError
    total = sum(d for d in along if isinstance(d, int))
    return (total, other.pop()) if axis == 0 else (other.pop(), total)


def _split(node: Node, shapes: Shapes, _: Consts) -> Shape:
    _arity(node, shapes, 1, len(node.outputs))
    axis, parts = node.attributes["axis"], node.attributes["num_outputs"]
    shape = list(shapes[0])
    dim = shape[axis]
    if axis not in (0, 1) or parts != len(node.outputs) or not isinstance(dim, int) or dim % parts:
        raise ValueError
    shape[axis] = dim // parts
    return tuple(shape)


def _gather(node: Node, shapes: Shapes, _: Consts) -> Shape:
    _arity(node, shapes, 2)
    axis = node.attributes.get("axis", 0)
    if len(shapes[1]) != 1 or axis not in range(len(shapes[0])):
        raise ValueError
    return (*shapes[0][:axis], *shapes[1], *shapes[0][axis + 1 :])


def _scatter(node: Node, shapes: Shapes, _: Consts) -> Shape:
    _arity(node, shapes, 3)
    data, index, updates = shapes
    if index != (updates[0], 1) or data[1:] != updates[1:] or len(data) != 2:
        raise ValueError
    if node.attributes["reduction"] not in ("max", "mul", "add"):
        raise ValueError
    return data


def _scatter_elements(node: Node, shapes: Shapes, _: Consts) -> Shape:
    """Every number of `updates` to a place of its own row."""
    _arity(node, shapes, 3)
    data, index, updates = shapes
    if not data == index == updates or len(data) != 2 or data[1] != _N or node.attributes["axis"] != 1:
        raise ValueError
    if node.attributes["reduction"] != "max":
        raise ValueError
    return data


def _product(a: Shape, b: Shape) -> Shape:
    (m, k), (k2, n) = a, b
    if k != k2:
        raise ValueError
    return m, n


def _matmul(node: Node, shapes: Shapes, _: Consts) -> Shape:
    _arity(node, shapes, 2)
    return _product(*shapes)


def _gemm(node: Node, shapes: Shapes, _: Consts) -> Shape:
    if len(shapes) not in (2, 3) or len(node.outputs) != 1:
        raise ValueError
    a, b = shapes[:2]
    if node.attributes.get("transA"):
        a = (a[1], a[0])
    if node.attributes.get("transB"):
        b = (b[1], b[0])
    out = _product(a, b)
    if len(shapes) == 3 and _broadcast(Node(outputs=["_"]), (out, shapes[2]), ()) != out:
        raise ValueError
    return out


def _reduce(node: Node, shapes: Shapes, constants: Consts) -> Shape:
    if len(shapes) not in (1, 2) or len(node.outputs) != 1:
        raise ValueError
    axes = _list(constants[1]) if len(shapes) == 2 else range(len(shapes[0]))
    keep = node.attributes.get("keepdims", 1)
    if any(not 0 <= axis < len(shapes[0]) for axis in axes):
        raise ValueError
    return tuple(1 if i in axes else d for i, d in enumerate(shapes[0]) if keep or i not in axes)


def _arg(node: Node, shapes: Shapes, _: Consts) -> Shape:
    _arity(node, shapes, 1)
    axis, keep = node.attributes.get("axis", 0), node.attributes.get("keepdims", 1)
    if not 0 <= axis < len(shapes[0]):
        raise ValueError
    return tuple(1 if i == axis else d for i, d in enumerate(shapes[0]) if keep or i != axis)


def _ensemble(node: Node, shapes: Shapes, _: Consts) -> Shape:
    """Every feature that a tree looks at must be a column of its input."""
    _arity(node, shapes, 1)
    if len(shapes[0]) != 2 or shapes[0][0] != _N:
        raise ValueError
    width = shapes[0][1]
    if not isinstance(width, int) or np.max(node.attributes["nodes_featureids"]) >= width:
        raise ValueError
    return _N, 1


def _arity(node: Node, shapes: Shapes, inputs: int, outputs: int = 1) -> None:
    if len(shapes) != inputs or len(node.outputs) != outputs:
        raise ValueError


def _list(value: NDArray[Any] | None) -> list[int]:
    if value is None or value.ndim != 1:
        raise ValueError
    return [int(x) for x in np.asarray(value)]


# Operator -> allowed attributes, rule.
OPERATORS: Final[dict[str, tuple[tuple[str, ...], Rule]]] = {
    **dict.fromkeys(("Abs", "Erf", "Exp", "Log", "Relu", "Sigmoid", "Sqrt", "Tanh"), ((), _same)),
    **dict.fromkeys(("Add", "And", "Div", "Equal", "Greater", "GreaterOrEqual"), ((), _broadcast)),
    **dict.fromkeys(("LessOrEqual", "Max", "Min", "Mul", "Sub"), ((), _broadcast)),
    "ArgMax": (("axis", "keepdims"), _arg),
    "Cast": (("to",), _same),
    "Clip": ((), _clip),
    "Concat": (("axis",), _concat),
    "Gather": (("axis",), _gather),
    "Gemm": (("transA", "transB", "alpha", "beta"), _gemm),
    "HardSigmoid": (("alpha", "beta"), _same),
    "MatMul": ((), _matmul),
    "ReduceL1": (("keepdims",), _reduce),
    "ReduceMax": (("keepdims",), _reduce),
    "Reshape": ((), _reshape),
    "ScatterElements": (("axis", "reduction"), _scatter_elements),
    "ScatterND": (("reduction",), _scatter),
    "Split": (("axis", "num_outputs"), _split),
    "Transpose": (("perm",), _transpose),
    "Unsqueeze": ((), _unsqueeze),
    "Where": ((), _where),
    "ai.onnx.ml:TreeEnsemble": ((), _ensemble),
}
