"""What an agent hands to a recorder, copied at once and made a line of a trace later; floor 4, light."""

from __future__ import annotations

import json
import math
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

__all__ = ["MOST_LINE", "Seen", "copy_record", "copy_table", "hold_tree", "pack", "trace_line"]

MOST_LINE: Final = 64 * 2**20  # bytes; readers of traces refuse longer lines
_MOST_RATIO: Final = 100  # unpacked bytes a packed byte; readers take more than 200 for an attack
_LEVEL: Final = 4  # a third of the time of level 6 for 2 % more bytes
_ITEM_BYTES: Final = 1024  # what a queued tree takes besides its arrays, roughly
_PART: Final = 256  # numbers written at a time, about 0.1 ms
# Columns of a leaf table under another name in the record, and what stands there at inner nodes.
_KEYS: Final = {"offset": ("reward", "0"), "gain": ("discount", "1")}
_BELIEF_KEYS: Final = (*schema.GAUSSIAN_COLUMNS, *schema.WIN_LOSS_COLUMNS)
_LEAF_KEYS: Final = frozenset((*_BELIEF_KEYS, "count", "cost"))
_SCALAR_KEYS: Final = frozenset(("format", "horizon", "batch", "remaining", "id"))
_CALL_SCALARS: Final = ("remaining", "horizon", "batch_size")  # of a leaf table
_MOST_NUMBERS: Final = 4_000_000  # of a record; readers of traces refuse lines of more
_NUMBER_BYTES: Final = 32  # a number in a list


@dataclass(frozen=True, eq=False)
class Seen:
    """A tree, copies of the columns of a leaf table, or a copied record; still to be checked.

    extra : JSON text of a table's or a record's. size : bytes of memory, roughly.
    """

    tree: BeliefTree | None
    columns: dict[str, NDArray[Any]]
    extra: str | None
    size: int
    record: dict[str, Any] | None = None


def copy_table(
    columns: dict[str, Any], extra: Any, unnamed: tuple[object, ...], unknown: dict[str, object]
) -> Seen:
    """The agent's arrays as they are now. InputError for what is not named or holds no numbers."""
    if unnamed:
        raise InputError("arguments", "must be named, as columns of a leaf table are")
    if unknown:
        raise InputError(f"key {next(iter(unknown))!r}", f"must be among {', '.join(columns)}, extra")
    copies = {}
    for name, column in columns.items():
        if column is not None:
            try:
                copies[name] = np.array(column)
            except Exception:  # whatever the agent's own array types raise
                raise InputError(name, "must be an array of numbers") from None
            number_array(name, copies[name], "f")
    text = _extra_text(extra)
    return Seen(None, copies, text, sum(x.nbytes for x in copies.values()) + len(text or "") + _ITEM_BYTES)


def copy_record(record: Any) -> Seen:
    """A record's columns as they are now, lists or arrays. InputError for what is no record at sight.

    The copy costs about what copying its lists does: what they hold is looked at later.
    """
    if not isinstance(record, dict):
        raise InputError("record", "must be a dict", type(record).__name__)
    columns = {}
    numbers = 0
    for key, value in record.items():
        if key not in schema.RECORD_KEYS:
            raise InputError(f"key {str(key)[:60]!r}", f"is not a key of {schema.TREE_FORMAT}")
        if value is None or key == "extra":
            continue
        if key in _SCALAR_KEYS:
            columns[key] = value
            continue
        rows = value if key == "cov" and isinstance(value, (list, tuple)) else (value,)
        if not all(isinstance(row, (list, tuple, np.ndarray)) for row in rows):
            raise InputError(key, "must be a list or an array")
        numbers += sum(row.size if isinstance(row, np.ndarray) else len(row) for row in rows)
        if numbers > _MOST_NUMBERS:
            raise InputError("record", f"must not hold more than {_MOST_NUMBERS:,} numbers")
        copies = [row.copy() if isinstance(row, np.ndarray) else list(row) for row in rows]
        columns[key] = copies if rows is value else copies[0]
    text = _extra_text(record.get("extra"))
    return Seen(None, {}, text, _ITEM_BYTES + _NUMBER_BYTES * numbers + len(text or ""), columns)


def _extra_text(extra: Any) -> str | None:
    if extra is None:
        return None
    try:
        return json.dumps(extra, allow_nan=False, separators=(",", ":"), default=lambda x: x.tolist())
    except Exception as e:
        raise InputError("extra", f"must be an object for JSON ({type(e).__name__})") from None


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
    if seen.record is not None:
        record = to_record(from_record(_plain(seen.record, seen.extra, pause)))
        pause()
    elif seen.tree is None:
        return _table_line(seen, pause)
    else:
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
    for name, key, least in (("remaining", "remaining", 0), ("batch_size", "batch", 1)):
        if name in seen.columns:
            record[key] = str(_whole(name, seen.columns[name], least))
    if "horizon" in seen.columns:
        record["horizon"] = _horizon(seen.columns["horizon"], "alpha" in seen.columns)
    if seen.extra is not None:
        if not isinstance(parse_json(seen.extra), dict):
            raise InputError("extra", "must be an object", seen.extra)
        record["extra"] = seen.extra
    return ("{" + ",".join(f'"{key}":{text}' for key, text in record.items()) + "}\n").encode()


def _plain(columns: dict[str, Any], extra: str | None, pause: Callable[[], None]) -> dict[str, Any]:
    """The record as from JSON: NumPy's numbers as Python's, NaN of a leaf column as null."""
    record: dict[str, Any] = {"format": schema.TREE_FORMAT}
    for key, value in columns.items():
        if key in _SCALAR_KEYS:
            record[key] = _plain_value(key, value)
            continue
        plain = _listed(key, value)
        if key == "cov":
            record[key] = [[_plain_value(key, x) for x in _listed(key, row)] for row in plain]
        else:
            record[key] = [_plain_value(key, x) for x in plain]
        if key in _LEAF_KEYS:
            record[key] = [None if isinstance(x, float) and math.isnan(x) else x for x in record[key]]
        pause()
    if extra is not None:
        record["extra"] = parse_json(extra)
    return record


def _listed(key: str, column: Any) -> list[Any]:
    plain = column.tolist() if isinstance(column, np.ndarray) else column
    if not isinstance(plain, list):
        raise InputError(key, "must have as many dimensions as a record's")
    return plain


def _plain_value(key: str, x: Any) -> Any:
    """A number, text or None; what an agent's own types say of themselves is not asked for."""
    if isinstance(x, (np.generic, np.ndarray)) and x.size == 1:
        x = x.item()
    if x is None or type(x) in (int, float, str, bool):
        return x
    raise InputError(key, "must hold numbers", type(x).__name__)


def _array(head: list[str], values: NDArray[Any], pause: Callable[[], None]) -> str:
    """A JSON array of `head` and the numbers, which come back bit for bit."""
    parts = list(head)
    for start in range(0, len(values), _PART):
        if start:
            pause()
        parts.append(json.dumps(values[start : start + _PART].tolist(), separators=(",", ":"))[1:-1])
    return "[" + ",".join(parts) + "]"


def _checked(columns: dict[str, NDArray[Any]]) -> tuple[dict[str, NDArray[Any]], NDArray[np.int64]]:
    """The columns of numbers, counts as whole ones, and the actions; errors name the agent's rows."""
    given = [name for name in _BELIEF_KEYS if name in columns]
    coins = bool(given) and given[0] in schema.WIN_LOSS_COLUMNS
    belief: tuple[str, ...] = schema.WIN_LOSS_COLUMNS if coins else schema.GAUSSIAN_COLUMNS
    for other in given:
        if other not in belief:
            raise InputError(other, f"must not be given beside {given[0]!r}: one belief kind a tree")
    for needed in (*belief, "action"):
        if needed not in columns:
            raise InputError(needed, "is missing")
    first = belief[0]
    n = columns[first].size
    if columns[first].ndim != 1 or not 1 <= n <= MAX_LEAVES:
        raise InputError(first, f"must have shape (n,), n from 1 to {MAX_LEAVES}", columns[first].shape)
    out: dict[str, NDArray[Any]] = {}
    for name, x in columns.items():
        if name in _CALL_SCALARS:
            continue
        if x.shape != (n,):
            raise InputError(name, f"must have shape ({n},), as {first!r}", x.shape)
        if name == "action":
            action = number_array(name, x, "i")
            _demand(name, action, (action >= 0) & (action < n), f"must be from 0 to {n - 1}")
            continue
        with np.errstate(over="ignore"):
            out[name] = x.astype(np.float64)
        ok, rule = _rule(name, out[name])
        _demand(name, out[name], ok, rule)
        if name == "count":
            out[name] = out[name].astype(np.int64)
    if coins:
        _demand("high", out["high"], out["high"] > out["low"], "must be above 'low'")
    return out, action.astype(np.int64)


def _rule(name: str, x: NDArray[np.float64]) -> tuple[NDArray[np.bool_], str]:
    """The record's rule for a column; NaN keeps none of them."""
    if name == "gain":
        return (x > 0) & (x <= 1), "must be above 0 and at most 1"
    if name == "cost":
        return (x >= 0) & np.isfinite(x), "must be finite and >= 0"
    if name == "count":
        return (x >= 0) & (x <= schema.MAX_ROLLOUTS) & (
            np.floor(x) == x
        ), "must be a whole number from 0 to 2^53"
    if name in ("alpha", "beta"):
        return (x > 0) & (x <= schema.MAX_ROLLOUTS), "must be > 0 and at most 2^53"
    if name in ("var", "noise_var"):
        least = x >= 0 if name == "var" else x > 0
        sign = ">= 0" if name == "var" else "> 0"
        return least & (x <= schema.MAX_VARIANCE), f"must be {sign} and at most {schema.MAX_VARIANCE:g}"
    return np.abs(x) <= schema.MAX_UTILITY, f"must be finite and at most {schema.MAX_UTILITY:g} in size"


def _whole(name: str, number: NDArray[Any], least: int) -> int:
    if number.size != 1:
        raise InputError(name, "must be one number", number.shape)
    value = number.item()
    if not least <= value <= schema.MAX_ROLLOUTS or value != int(value):
        raise InputError(name, f"must be a whole number from {least} to 2^53", value)
    return int(value)


def _horizon(horizon: NDArray[Any], whole: bool) -> str:
    if horizon.size != 1:
        raise InputError("horizon", "must be one number", horizon.shape)
    value = float(horizon.item())
    if not value >= 0:
        raise InputError("horizon", "must be >= 0", value)
    if value == math.inf:
        return '"inf"'
    if whole and value != int(value):
        raise InputError("horizon", "must be a whole number or infinite for win/loss leaves", value)
    return json.dumps(value)


def _demand(name: str, values: NDArray[Any], ok: NDArray[np.bool_], rule: str) -> None:
    if not ok.all():
        row = int(np.argmin(ok))
        raise InputError(f"{name}[{row}]", rule, values[row].item())
