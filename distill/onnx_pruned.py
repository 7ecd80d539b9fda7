"""A scorer file cut down to some of its outputs, on protobuf's wire format; floor 1, light.

onnxruntime runs every node of a session whatever outputs are asked for. An agent that only picks pays a tenth
for bounds and batches that it does not read, so the runtime opens a second session on the nodes of the pick.
The bytes are those of a file that `scorer_file.check` has accepted.
"""

from __future__ import annotations

from collections.abc import Collection, Iterator
from typing import Final

__all__ = ["pruned"]

# Field numbers of onnx.proto, and wire types.
_GRAPH: Final = 7
_NODE, _OUTPUT = 1, 12
_NODE_INPUT, _NODE_OUTPUT = 1, 2
_NAME: Final = 1
_VARINT, _FIXED64, _BYTES, _FIXED32 = 0, 1, 2, 5


def pruned(data: bytes, outputs: Collection[str]) -> bytes:
    """The model with these outputs of its graph alone, and the nodes that they come from, in order."""
    parts = []
    for number, whole, content in _fields(data):
        if number == _GRAPH:
            graph = _graph(content, set(outputs))
            parts += [_varint(_GRAPH << 3 | _BYTES), _varint(len(graph)), graph]
        else:
            parts.append(whole)
    return b"".join(parts)


def _graph(data: bytes, wanted: set[str]) -> bytes:
    fields = list(_fields(data))
    kept = []
    for number, whole, content in reversed(fields):
        if number == _OUTPUT and not wanted.intersection(_texts(content, _NAME)):
            continue
        if number == _NODE:
            if not wanted.intersection(_texts(content, _NODE_OUTPUT)):
                continue
            wanted.update(_texts(content, _NODE_INPUT))
        kept.append(whole)
    return b"".join(reversed(kept))


def _texts(data: bytes, number: int) -> list[str]:
    return [content.decode() for found, _, content in _fields(data) if found == number]


def _fields(data: bytes) -> Iterator[tuple[int, bytes, bytes]]:
    """(number, the whole field, its content) of a message's fields; the content of numbers is left empty."""
    at = 0
    while at < len(data):
        start = at
        tag, at = _read_varint(data, at)
        wire, content = tag & 7, b""
        if wire == _VARINT:
            _, at = _read_varint(data, at)
        elif wire == _BYTES:
            size, at = _read_varint(data, at)
            content = data[at : at + size]
            at += size
        else:
            at += {_FIXED64: 8, _FIXED32: 4}[wire]
        yield tag >> 3, data[start:at], content


def _read_varint(data: bytes, at: int) -> tuple[int, int]:
    value = shift = 0
    while data[at] & 0x80:
        value |= (data[at] & 0x7F) << shift
        at, shift = at + 1, shift + 7
    return (value | data[at] << shift) & 0xFFFFFFFFFFFFFFFF, at + 1  # as the reader that checked it


def _varint(value: int) -> bytes:
    out = bytearray()
    while value >= 0x80:
        out.append(value & 0x7F | 0x80)
        value >>= 7
    return bytes([*out, value])
