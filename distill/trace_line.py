"""What an agent hands to a recorder, copied at once and made a line of a trace later; floor 4, light."""

from __future__ import annotations

import json
import zlib
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from distill import schema
from distill.errors import InputError
from distill.leaf_buffers import MAX_LEAVES, number_array
from distill.record import from_record, parse_json, to_record
from distill.tree import BeliefTree

__all__ = ["MOST_LINE", "Seen", "copy_table", "hold_tree", "pack", "trace_line"]

MOST_LINE: Final = 64 * 2**20  # bytes; readers of traces refuse longer lines
_MOST_RATIO: Final = 100  # unpacked bytes a packed byte; readers take more than 200 for an attack
_LEVEL: Final = 4  # a third of the time of level 6 for 2 % more bytes
_ITEM_BYTES: Final = 1024  # what a queued tree takes besides its arrays, roughly
_PART: Final = 256  # numbers written at a time, about 0.1 ms
# Columns of a leaf table under another name in the record, and what stands there at inner nodes.
_KEYS: Final = {"offset": ("reward", "0"), "gain": ("discount", "1")}


@dataclass(frozen=True, eq=False)
class Seen:
    """A tree, or copies of the columns of a leaf table with `extra` as JSON; still to be checked.

    size : bytes of memory, roughly.
    """

    tree: BeliefTree | None
    columns: dict[str, NDArray[Any]]
    extra: str | None
    size: int


def copy_table(
    columns: dict[str, Any], extra: Any, unnamed: tuple[object, ...], unknown: dict[str, object]
) -> Seen:
    """The agent's arrays as they are now. InputError for what is not named or holds no numbers."""
    if unnamed or unknown:
        which = f"key {next(iter(unknown))!r}" if unknown else "arguments"
        raise InputError(which, "must be named, as columns of a leaf table are")
    copies = {}
    for name, column in columns.items():
        if column is not None:
            try:
                copies[name] = np.array(column)
            except Exception:  # whatever the agent's own array types raise
                raise InputError(name, "must be an array of numbers") from None
            number_array(name, copies[name], "f")
    text = None
    if extra is not None:
        try:
            text = json.dumps(extra, allow_nan=False, separators=(",", ":"), default=lambda x: x.tolist())
        except Exception as e:
            raise InputError("extra", f"must be an object for JSON ({type(e).__name__})") from None
    return Seen(None, copies, text, sum(x.nbytes for x in copies.values()) + len(text or "") + _ITEM_BYTES)


def hold_tree(tree: BeliefTree) -> Seen:
    """A tree as it is, uncopied."""
    if not isinstance(tree, BeliefTree):
        raise InputError("tree", "must be a BeliefTree", type(tree).__name__)
    size = sum(x.nbytes for x in vars(tree).values() if isinstance(x, np.ndarray))
    return Seen(tree, {}, None, size + _ITEM_BYTES)


def trace_line(seen: Seen, pause: Callable[[], None] = lambda: None) -> bytes:
    """The line of a trace, with its line end; InputError where there is no valid record.

    pause : called between parts of a large table, since no other thread runs while a part is made.
    """
    if seen.tree is None:
        return _table_line(seen, pause)
    record = to_record(seen.tree)
    pause()
    from_record(record)
    pause()
    return json.dumps(record, separators=(",", ":"), allow_nan=False).encode() + b"\n"


def pack(text: bytes) -> bytes:
    """One gzip member. A text of mere repetition is packed at most _MOST_RATIO to one, so that it is read."""
    block = b""
    for strategy in (zlib.Z_DEFAULT_STRATEGY, zlib.Z_HUFFMAN_ONLY):
        packer = zlib.compressobj(_LEVEL, zlib.DEFLATED, 16 + zlib.MAX_WBITS, 8, strategy)
        block = packer.compress(text) + packer.flush()
        if len(text) <= _MOST_RATIO * len(block):
            break
    return block


def _table_line(seen: Seen, pause: Callable[[], None]) -> bytes:
    """A leaf table as root, a decision node an action, and leaves; valid by the checks made here."""
    columns, action = _checked(seen.columns)
    # Positions without a leaf are no actions; the others close up, in order.
    present, position = np.unique(action, return_inverse=True)
    inner = 1 + len(present)
    record = {
        "format": f'"{schema.TREE_FORMAT}"',
        "parent": _array(["-1", *["0"] * len(present)], position + 1, pause),
        "kind": "[" + ",".join(['"decision"'] * inner + ['"leaf"'] * len(action)) + "]",
    }
    for name, x in columns.items():
        key, at_inner = _KEYS.get(name, (name, "null"))
        record[key] = _array([at_inner] * inner, x, pause)
    if "remaining" in seen.columns:
        record["remaining"] = str(_whole(seen.columns["remaining"]))
    if seen.extra is not None:
        if not isinstance(parse_json(seen.extra), dict):
            raise InputError("extra", "must be an object", seen.extra)
        record["extra"] = seen.extra
    return ("{" + ",".join(f'"{key}":{text}' for key, text in record.items()) + "}\n").encode()


def _array(head: list[str], values: NDArray[Any], pause: Callable[[], None]) -> str:
    """A JSON array of `head` and the numbers, which come back bit for bit."""
    parts = list(head)
    for start in range(0, len(values), _PART):
        if start:
            pause()
        parts.append(json.dumps(values[start : start + _PART].tolist(), separators=(",", ":"))[1:-1])
    return "[" + ",".join(parts) + "]"


def _checked(columns: dict[str, NDArray[Any]]) -> tuple[dict[str, NDArray[np.float64]], NDArray[np.int64]]:
    """The columns of numbers, and the actions; errors name the row as the agent does."""
    for name in (*schema.GAUSSIAN_COLUMNS, "action"):
        if name not in columns:
            raise InputError(name, "is missing")
    n = columns["mean"].size
    if columns["mean"].ndim != 1 or not 1 <= n <= MAX_LEAVES:
        raise InputError("mean", f"must have shape (n,), n from 1 to {MAX_LEAVES}", columns["mean"].shape)
    out = {}
    for name, x in columns.items():
        if name == "remaining":
            continue
        if x.shape != (n,):
            raise InputError(name, f"must have shape ({n},), as 'mean'", x.shape)
        if name == "action":
            action = number_array(name, x, "i")
            _demand(name, action, (action >= 0) & (action < n), f"must be from 0 to {n - 1}")
            continue
        with np.errstate(over="ignore"):
            out[name] = x.astype(np.float64)
        ok, rule = _rule(name, out[name])
        _demand(name, out[name], ok, rule)
    return out, action.astype(np.int64)


def _rule(name: str, x: NDArray[np.float64]) -> tuple[NDArray[np.bool_], str]:
    """The record's rule for a column; NaN keeps none of them."""
    if name == "gain":
        return (x > 0) & (x <= 1), "must be above 0 and at most 1"
    if name == "cost":
        return (x >= 0) & np.isfinite(x), "must be finite and >= 0"
    if name in ("var", "noise_var"):
        least = x >= 0 if name == "var" else x > 0
        sign = ">= 0" if name == "var" else "> 0"
        return least & (x <= schema.MAX_VARIANCE), f"must be {sign} and at most {schema.MAX_VARIANCE:g}"
    return np.abs(x) <= schema.MAX_UTILITY, f"must be finite and at most {schema.MAX_UTILITY:g} in size"


def _whole(remaining: NDArray[Any]) -> int:
    if remaining.size != 1:
        raise InputError("remaining", "must be one number", remaining.shape)
    value = remaining.item()
    if not 0 <= value <= schema.MAX_ROLLOUTS or value != int(value):
        raise InputError("remaining", "must be a whole number from 0 to 2^53", value)
    return int(value)


def _demand(name: str, values: NDArray[Any], ok: NDArray[np.bool_], rule: str) -> None:
    if not ok.all():
        row = int(np.argmin(ok))
        raise InputError(f"{name}[{row}]", rule, values[row].item())
