"""A strict reader of the part of the ONNX format that scorer files use; floor 1, light.

It reads protobuf's wire format (https://protobuf.dev/programming-guides/encoding/) into plain Python
objects and refuses every field that a scorer file has no use for: subgraphs, functions, sparse tensors,
external data. So a file can be judged before onnxruntime, or any other library, has seen it.
Field numbers are those of onnx.proto, IR version 10.
"""

from __future__ import annotations

import struct
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any, Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

from distill.errors import ScorerFileError

__all__ = ["FLOAT", "INT64", "UINT8", "BOOL", "DOUBLE", "Model", "Node", "ValueInfo", "read_model"]

# Element types of tensors (TensorProto.DataType).
FLOAT: Final = 1
UINT8: Final = 2
INT64: Final = 7
BOOL: Final = 9
DOUBLE: Final = 11
_DTYPES: Final = {FLOAT: "<f4", UINT8: "|u1", INT64: "<i8", BOOL: "|b1", DOUBLE: "<f8"}

_VARINT, _FIXED64, _BYTES, _FIXED32 = 0, 1, 2, 5
_MAX_NAME: Final = 200  # bytes of a name
_MAX_DIMS: Final = 4
_MAX_STEPS: Final = 250_000  # a boosting ensemble takes about 200 a tree of 31 leaves

Field = tuple[int, int, Any]


@dataclass
class Node:
    """One operator; attribute values are int, float, str, arrays of whole numbers, or tensors."""

    op: str = ""
    domain: str = ""
    inputs: list[str] = field(default_factory=list)
    outputs: list[str] = field(default_factory=list)
    attributes: dict[str, Any] = field(default_factory=dict)


@dataclass
class ValueInfo:
    """Name, element type and shape of an input or output; a text in the shape is a free dimension."""

    name: str = ""
    element: int = 0
    shape: tuple[int | str, ...] = ()


@dataclass
class Model:
    """What a scorer file holds."""

    ir_version: int = 0
    opsets: list[tuple[str, int]] = field(default_factory=list)
    metadata: dict[str, str] = field(default_factory=dict)
    nodes: list[Node] = field(default_factory=list)
    constants: dict[str, NDArray[Any]] = field(default_factory=dict)
    inputs: list[ValueInfo] = field(default_factory=list)
    outputs: list[ValueInfo] = field(default_factory=list)


def read_model(data: bytes) -> Model:
    """The model in `data`; ScorerFileError names what is not readable or not allowed."""
    model, graphs = Model(), 0
    for number, wire, value in _fields(_Span(memoryview(data), _Budget()), "model"):
        if number == 1:
            model.ir_version = _whole(wire, value, "model.ir_version")
        elif number in (2, 3):  # producer_name, producer_version
            _text(wire, value, "model.producer")
        elif number == 7:
            graphs += 1
            if graphs > 1:
                raise ScorerFileError("model.graph: must occur once")
            _read_graph(model, _message(wire, value, "model.graph"))
        elif number == 8:
            model.opsets.append(_opset(_message(wire, value, "model.opset_import")))
        elif number == 14:
            key, text = _pair(_message(wire, value, "model.metadata_props"))
            if key in model.metadata:
                raise ScorerFileError(f"metadata {key!r}: must not occur twice")
            model.metadata[key] = text
        else:
            raise _unknown("model", number)
    if not graphs:
        raise ScorerFileError("model.graph: is missing; this is no ONNX model")
    return model


# --- wire format -------------------------------------------------------------------------------------


class _Budget:
    """Steps that reading one file may take; a hostile file of millions of tiny fields meets its end here."""

    def __init__(self) -> None:
        self.left = _MAX_STEPS

    def spend(self) -> None:
        self.left -= 1
        if self.left < 0:
            raise ScorerFileError(f"has more than {_MAX_STEPS} fields and list entries")


class _Span(NamedTuple):
    """Bytes of one message, and the file's budget."""

    data: memoryview
    budget: _Budget


def _fields(span: _Span, place: str) -> Iterator[Field]:
    """(field number, wire type, value) of a message; numbers as int, the rest as spans."""
    data = span.data
    at, end = 0, len(data)
    while at < end:
        span.budget.spend()
        tag, at = _varint(data, at, place)
        number, wire = tag >> 3, tag & 7
        if number == 0:
            raise ScorerFileError(f"{place}: no protobuf message")
        value: Any
        if wire == _VARINT:
            value, at = _varint(data, at, place)
        elif wire in (_FIXED64, _FIXED32):
            size = 8 if wire == _FIXED64 else 4
            value, at = data[at : at + size], at + size
        elif wire == _BYTES:
            size, at = _varint(data, at, place)
            value, at = _Span(data[at : at + size], span.budget), at + size
        else:
            raise ScorerFileError(f"{place}: no protobuf message")
        if at > end:
            raise ScorerFileError(f"{place}: ends too early")
        yield number, wire, value


def _varint(data: memoryview, at: int, place: str) -> tuple[int, int]:
    value = shift = 0
    while True:
        if at >= len(data):
            raise ScorerFileError(f"{place}: ends too early")
        byte = data[at]
        at += 1
        value |= (byte & 0x7F) << shift
        if byte < 0x80:
            break
        shift += 7
        if shift > 63:
            raise ScorerFileError(f"{place}: a number of more than 64 bits")
    return value & 0xFFFFFFFFFFFFFFFF, at


def _signed(value: int) -> int:
    return value - (1 << 64) if value >= 1 << 63 else value


def _whole(wire: int, value: Any, place: str) -> int:
    if wire != _VARINT:
        raise ScorerFileError(f"{place}: must be a whole number")
    return _signed(value)


def _message(wire: int, value: Any, place: str) -> _Span:
    if wire != _BYTES:
        raise ScorerFileError(f"{place}: must be a message")
    return _Span(*value)


def _text(wire: int, value: Any, place: str, most: int = _MAX_NAME) -> str:
    if wire != _BYTES or len(value.data) > most:
        raise ScorerFileError(f"{place}: must be a text of at most {most} bytes")
    try:
        return bytes(value.data).decode()
    except UnicodeDecodeError:
        raise ScorerFileError(f"{place}: must be UTF-8") from None


def _wholes(wire: int, value: Any, place: str) -> list[int]:
    """A repeated whole number, packed or not."""
    if wire == _VARINT:
        return [_signed(value)]
    out, at, (data, budget) = [], 0, _message(wire, value, place)
    while at < len(data):
        budget.spend()
        x, at = _varint(data, at, place)
        out.append(_signed(x))
    return out


def _unknown(place: str, number: int) -> ScorerFileError:
    return ScorerFileError(f"{place}: field {number} has no place in a scorer file")


# --- messages ----------------------------------------------------------------------------------------


def _opset(data: _Span) -> tuple[str, int]:
    domain, version = "", 0
    for number, wire, value in _fields(data, "opset_import"):
        if number == 1:
            domain = _text(wire, value, "opset_import.domain")
        elif number == 2:
            version = _whole(wire, value, "opset_import.version")
        else:
            raise _unknown("opset_import", number)
    return domain, version


def _pair(data: _Span) -> tuple[str, str]:
    key = text = ""
    for number, wire, value in _fields(data, "metadata"):
        if number == 1:
            key = _text(wire, value, "metadata key")
        elif number == 2:
            text = _text(wire, value, f"metadata {key!r}", most=1 << 31)
        else:
            raise _unknown("metadata", number)
    return key, text


def _read_graph(model: Model, data: _Span) -> None:
    for number, wire, value in _fields(data, "graph"):
        if number == 1:
            model.nodes.append(_node(_message(wire, value, "graph.node")))
        elif number == 2:
            _text(wire, value, "graph.name")
        elif number == 5:
            name, array = _tensor(_message(wire, value, "graph.initializer"), "initializer")
            if not name or name in model.constants:
                raise ScorerFileError(f"initializer {name!r}: must have a name of its own")
            model.constants[name] = array
        elif number == 11:
            model.inputs.append(_value_info(_message(wire, value, "graph.input")))
        elif number == 12:
            model.outputs.append(_value_info(_message(wire, value, "graph.output")))
        else:
            raise _unknown("graph", number)


def _node(data: _Span) -> Node:
    node = Node()
    for number, wire, value in _fields(data, "node"):
        if number == 1:
            node.inputs.append(_text(wire, value, "node.input"))
        elif number == 2:
            node.outputs.append(_text(wire, value, "node.output"))
        elif number == 3:
            _text(wire, value, "node.name")
        elif number == 4:
            node.op = _text(wire, value, "node.op_type")
        elif number == 5:
            name, content = _attribute(_message(wire, value, "node.attribute"))
            if name in node.attributes:
                raise ScorerFileError(f"attribute {name!r}: must not occur twice")
            node.attributes[name] = content
        elif number == 7:
            node.domain = _text(wire, value, "node.domain")
        else:
            raise _unknown("node", number)
    return node


def _attribute(data: _Span) -> tuple[str, Any]:
    name, content, wholes = "", None, None
    for number, wire, value in _fields(data, "attribute"):
        place = f"attribute {name!r}"
        if number == 1:
            name = _text(wire, value, "attribute.name")
        elif number == 2:
            if wire != _FIXED32:
                raise ScorerFileError(f"{place}: must be a float")
            content = struct.unpack("<f", value)[0]
        elif number == 3:
            content = _whole(wire, value, place)
        elif number == 4:
            content = _text(wire, value, place)
        elif number == 5:
            content = _tensor(_message(wire, value, place), place)[1]
        elif number == 8:
            wholes = wholes or []
            wholes.extend(_wholes(wire, value, place))
        elif number != 20:  # 20 is the kind of the value, which the field says as well
            raise _unknown(place, number)
    if (content is None) == (wholes is None):
        raise ScorerFileError(f"attribute {name!r}: must hold one value or one list")
    return name, content if wholes is None else np.array(wholes, dtype=np.int64)


def _tensor(data: _Span, place: str) -> tuple[str, NDArray[Any]]:
    name, kind = "", 0
    dims: list[int] = []
    raw: memoryview | None = None
    typed: list[memoryview] = []
    wholes: list[int] = []
    for number, wire, value in _fields(data, place):
        if number == 1:
            dims.extend(_wholes(wire, value, place))
        elif number == 2:
            kind = _whole(wire, value, place)
        elif number in (4, 10):  # float_data, double_data
            typed.append(value.data if wire == _BYTES else value if wire != _VARINT else memoryview(b""))
        elif number in (5, 7):  # int32_data (also of smaller kinds), int64_data
            wholes.extend(_wholes(wire, value, place))
        elif number == 8:
            name = _text(wire, value, place)
        elif number == 9:
            raw = _message(wire, value, place).data
        else:
            raise _unknown(f"{place} {name!r}", number)
    place = f"{place} {name!r}"
    if kind not in _DTYPES:
        raise ScorerFileError(f"{place}: must hold float, double, int64, uint8 or bool")
    if len(dims) > _MAX_DIMS or any(d < 0 for d in dims):
        raise ScorerFileError(f"{place}: must have at most {_MAX_DIMS} dimensions, none negative")
    dtype = np.dtype(_DTYPES[kind])
    content = bytes(raw) if raw is not None else b"".join(typed)
    if wholes:
        if content or dtype.kind not in "iu" or not all(-(2**63) <= x < 2**63 for x in wholes):
            raise ScorerFileError(f"{place}: must hold its values once, in its own kind")
        if dtype.kind == "u" and not all(0 <= x < 256 for x in wholes):
            raise ScorerFileError(f"{place}: must hold its values once, in its own kind")
        content = np.array(wholes, dtype=dtype).tobytes()
    size = dtype.itemsize
    for d in dims:
        size *= d
    if len(content) != size:
        raise ScorerFileError(f"{place}: must hold {size} bytes for its shape; got {len(content)}")
    return name, np.frombuffer(content, dtype=dtype).reshape(dims)


def _value_info(data: _Span) -> ValueInfo:
    info = ValueInfo()
    for number, wire, value in _fields(data, "value"):
        if number == 1:
            info.name = _text(wire, value, "value.name")
        elif number == 2:
            _read_type(info, _message(wire, value, "value.type"))
        else:
            raise _unknown("value", number)
    return info


def _read_type(info: ValueInfo, data: _Span) -> None:
    for number, wire, value in _fields(data, "type"):
        if number != 1:
            raise ScorerFileError(f"{info.name!r}: must be a tensor")
        for inner, inner_wire, inner_value in _fields(_message(wire, value, "type"), "tensor type"):
            if inner == 1:
                info.element = _whole(inner_wire, inner_value, "element type")
            elif inner == 2:
                info.shape = _shape(_message(inner_wire, inner_value, "shape"))
            else:
                raise _unknown("tensor type", inner)


def _shape(data: _Span) -> tuple[int | str, ...]:
    shape: list[int | str] = []
    for number, wire, value in _fields(data, "shape"):
        if number != 1:
            raise _unknown("shape", number)
        dim: int | str = ""
        for inner, inner_wire, inner_value in _fields(_message(wire, value, "dimension"), "dimension"):
            if inner == 1:
                dim = _whole(inner_wire, inner_value, "dimension")
            elif inner == 2:
                dim = _text(inner_wire, inner_value, "dimension")
            else:
                raise _unknown("dimension", inner)
        shape.append(dim)
    return tuple(shape)
