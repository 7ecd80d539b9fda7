"""What an agent hands to a recorder, copied at once and made a line of a trace later; floor 4, light."""

from __future__ import annotations

import json
import zlib
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
_ITEM_BYTES: Final = 1024  # what a queued tree takes besides its arrays, roughly


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


def trace_line(seen: Seen) -> bytes:
    """The line of a trace, with its line end; InputError where there is no valid record."""
    record = _table_record(seen) if seen.tree is None else to_record(seen.tree)
    from_record(record)
    return json.dumps(record, separators=(",", ":"), allow_nan=False).encode() + b"\n"


def pack(text: bytes) -> bytes:
    """One gzip member. A text of mere repetition is packed at most _MOST_RATIO to one, so that it is read."""
    block = b""
    for strategy in (zlib.Z_DEFAULT_STRATEGY, zlib.Z_HUFFMAN_ONLY):
        packer = zlib.compressobj(6, zlib.DEFLATED, 16 + zlib.MAX_WBITS, 8, strategy)
        block = packer.compress(text) + packer.flush()
        if len(text) <= _MOST_RATIO * len(block):
            break
    return block


def _table_record(seen: Seen) -> dict[str, Any]:
    """The record of a leaf table: root, a decision node an action, leaves."""
    columns = _checked_columns(seen.columns)
    n = len(columns["mean"])
    # Positions without a leaf are no actions; the others close up, in order.
    present, position = np.unique(columns["action"], return_inverse=True)
    inner = 1 + len(present)
    record: dict[str, Any] = {
        "format": schema.TREE_FORMAT,
        "parent": [-1] + [0] * len(present) + (position + 1).tolist(),
        "kind": ["decision"] * inner + ["leaf"] * n,
    }
    if "offset" in columns:
        record["reward"] = [0.0] * inner + columns["offset"].tolist()
    if "gain" in columns:
        record["discount"] = [1.0] * inner + columns["gain"].tolist()
    for name in (*schema.GAUSSIAN_COLUMNS, "cost"):
        if name in columns:
            record[name] = [None] * inner + columns[name].tolist()
    if "remaining" in columns:
        record["remaining"] = columns["remaining"].item()
    if seen.extra is not None:
        record["extra"] = parse_json(seen.extra)
    return record


def _checked_columns(columns: dict[str, NDArray[Any]]) -> dict[str, NDArray[Any]]:
    """The columns, of one length; `from_record` checks the values that it names as the agent does."""
    for name in (*schema.GAUSSIAN_COLUMNS, "action"):
        if name not in columns:
            raise InputError(name, "is missing")
    n = columns["mean"].size
    if columns["mean"].ndim != 1 or not 1 <= n <= MAX_LEAVES:
        raise InputError("mean", f"must have shape (n,), n from 1 to {MAX_LEAVES}", columns["mean"].shape)
    for name, x in columns.items():
        if name != "remaining" and x.shape != (n,):
            raise InputError(name, f"must have shape ({n},), as 'mean'", x.shape)
    if "remaining" in columns and columns["remaining"].size != 1:
        raise InputError("remaining", "must be one number", columns["remaining"].shape)
    action = number_array("action", columns["action"], "i")
    _demand("action", action, (action >= 0) & (action < n), f"must be from 0 to {n - 1}")
    if "gain" in columns:
        gain = columns["gain"]
        _demand("gain", gain, (gain > 0) & (gain <= 1), "must be above 0 and at most 1")
    if "offset" in columns:
        offset = columns["offset"]
        most = schema.MAX_UTILITY
        _demand("offset", offset, np.abs(offset) <= most, f"must be at most {most:g} in size")
    return columns


def _demand(name: str, values: NDArray[Any], ok: NDArray[np.bool_], rule: str) -> None:
    if not ok.all():
        row = int(np.argmin(ok))
        raise InputError(f"{name}[{row}]", rule, values[row].item())
