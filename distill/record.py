"""The record `belief-tree/1`: reading with full validation, and writing; floor 1, light."""

from __future__ import annotations

import codecs
import json
import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from distill import schema
from distill.errors import InputError
from distill.tree import BeliefTree, Floats, Ints

__all__ = ["from_record", "parse_json", "parse_record", "to_record"]

_PROB_SUM_SLACK = 1e-9  # the record's rule for probabilities under a chance node
_COV_SLACK = 1e-9  # rounding allowed in symmetry and eigenvalues, of the largest variance


def parse_record(text: str | bytes) -> BeliefTree:
    """One `belief-tree/1` record from JSON text; InputError names key, rule and value."""
    return from_record(parse_json(text))


def parse_json(text: str | bytes) -> object:
    """JSON text as Python objects; InputError names place and rule.

    Stricter than plain JSON readers: NaN and infinities, repeated keys and invalid UTF-8 are errors.

    >>> parse_json('{"mean": [null, 1.5, NaN]}')
    Traceback (most recent call last):
    distill.errors.InputError: mean[2]: must be finite; got nan
    """
    if isinstance(text, bytes):
        if text.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)) or b"\0" in text[:4]:
            raise InputError("record", "must be UTF-8 text; this looks like UTF-16 or UTF-32")
        try:
            text = text.decode("utf-8-sig")
        except UnicodeDecodeError as e:
            raise InputError(f"byte {e.start}", "must be UTF-8 text") from None
    constants: list[str] = []

    def constant(name: str) -> float:
        constants.append(name)
        return float(name)

    try:
        obj: object = json.loads(text, parse_constant=constant, object_pairs_hook=_no_repeats)
    except json.JSONDecodeError as e:
        raise InputError(f"column {e.colno}", f"must be valid JSON ({e.msg})") from None
    except RecursionError:
        raise InputError("record", "must not be nested so deeply") from None
    except ValueError as e:  # whole numbers of more digits than Python converts
        raise InputError("record", f"must be valid JSON ({e})") from None
    if constants:
        _finite(obj)
    return obj


def from_record(obj: object) -> BeliefTree:
    """A validated BeliefTree from a parsed record; InputError names key, rule and value.

    >>> from_record({"format": "belief-tree/1", "parent": [-1, 0], "kind": ["decision", "leaf"],
    ...              "mean": [None, 0], "var": [None, -1], "noise_var": [None, 1]})
    Traceback (most recent call last):
    distill.errors.InputError: var[1]: must be >= 0; got -1.0
    """
    try:
        return _from_record(obj)
    except InputError as e:
        if not e.value or not isinstance(e.value[0], (bool, list, dict, type(None))):
            raise
        raise InputError(e.place, e.rule, _Json(e.value[0])) from None


@dataclass(frozen=True)
class _Json:
    """A value that an error shows as it stands in the record: true and null, not True and None."""

    value: object

    def __repr__(self) -> str:
        try:
            return json.dumps(self.value, ensure_ascii=False, default=repr)
        except (TypeError, ValueError, RecursionError):  # what came as Python objects may be no JSON
            return f"a {type(self.value).__name__}"


def _from_record(obj: object) -> BeliefTree:
    if not isinstance(obj, dict):
        raise InputError("record", "must be a JSON object", obj)
    for key in obj:
        if key not in schema.RECORD_KEYS:
            raise InputError(f"key {key!r}", f"is not a key of {schema.TREE_FORMAT}")
    if "format" not in obj:
        raise InputError("format", f"is missing; must be {schema.TREE_FORMAT!r}")
    if obj["format"] != schema.TREE_FORMAT:
        raise InputError("format", f"must be {schema.TREE_FORMAT!r}", obj["format"])

    parent, kind = _topology(obj)
    n = len(parent)
    is_leaf = kind == schema.LEAF
    reward, discount, prob = _edges(obj, parent, kind)
    fields: dict[str, Any] = {}
    gaussian = _belief_kind(obj)
    names = schema.GAUSSIAN_COLUMNS if gaussian else schema.WIN_LOSS_COLUMNS
    for name in names:
        if name == "var" and obj.get("cov") is not None:
            if obj.get("var") is not None:
                raise InputError("var", "must not be given beside 'cov'")
            continue
        fields[name] = _leaf_column(obj, name, n, is_leaf)
    _belief_rules(fields, np.flatnonzero(is_leaf), gaussian)
    for name in ("count", "cost"):
        if obj.get(name) is not None:
            fields[name] = _leaf_column(obj, name, n, is_leaf)
            _demand(fields[name] >= 0, name, np.flatnonzero(is_leaf), fields[name], "must be >= 0")
    if obj.get("cov") is not None:
        fields["cov"] = _covariance(obj["cov"], int(is_leaf.sum()))
    fields.update(_scalars(obj, gaussian))
    return BeliefTree(parent, kind, reward, discount, prob, **fields)


def _finite(obj: object, place: str = "") -> None:
    """InputError that names the place of the first number, in the order of the text, that is not finite."""
    ahead = [(place, obj)]
    while ahead:
        at, x = ahead.pop()
        if isinstance(x, float) and not math.isfinite(x):
            raise InputError(at or "record", "must be finite", x)
        if isinstance(x, dict):
            names = ((key if key.isidentifier() else repr(key), y) for key, y in reversed(x.items()))
            ahead += [(f"{at}.{name}" if at else name, y) for name, y in names]
        elif isinstance(x, list):
            ahead += [(f"{at}[{i}]", y) for i, y in reversed(list(enumerate(x)))]


def _no_repeats(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    out: dict[str, Any] = {}
    for key, value in pairs:
        if key in out:
            raise InputError(f"key {key!r}", "must not occur twice")
        out[key] = value
    return out


def _topology(obj: dict[str, Any]) -> tuple[Ints, NDArray[np.int8]]:
    parents = _list(obj, "parent")
    n = len(parents)
    if n < 2:
        raise InputError("parent", "must have a root and at least one action", parents)
    for i, p in enumerate(parents):
        if type(p) is not int:
            raise InputError(f"parent[{i}]", "must be a whole number", p)
        if i == 0 and p != -1:
            raise InputError("parent[0]", "must be -1, the root's", p)
        if i > 0 and not 0 <= p < i:
            raise InputError(f"parent[{i}]", f"must be an earlier node, 0 to {i - 1}", p)
    kinds = _list(obj, "kind", n)
    for i, k in enumerate(kinds):
        if k not in schema.KINDS:
            raise InputError(f"kind[{i}]", f"must be one of {', '.join(schema.KINDS)}", k)
    parent = np.array(parents, dtype=np.int64)
    kind = np.array([schema.KINDS.index(k) for k in kinds], dtype=np.int8)
    if kind[0] != schema.DECISION:
        raise InputError("kind[0]", "must be 'decision', the root's", kinds[0])
    has_child = np.zeros(n, dtype=bool)
    has_child[parent[1:]] = True
    for i in np.flatnonzero(has_child & (kind == schema.LEAF)).tolist():
        raise InputError(f"kind[{i}]", "must not be 'leaf': the node has children")
    for i in np.flatnonzero(~has_child & (kind != schema.LEAF)).tolist():
        raise InputError(f"kind[{i}]", "must be 'leaf': the node has no child", kinds[i])
    return parent, kind


def _edges(obj: dict[str, Any], parent: Ints, kind: NDArray[np.int8]) -> tuple[Floats, Floats, Floats]:
    n = len(parent)
    nodes = np.arange(n)
    reward = _node_column(obj, "reward", n, 0.0)
    discount = _node_column(obj, "discount", n, 1.0)
    under_chance = np.zeros(n, dtype=bool)
    under_chance[1:] = kind[parent[1:]] == schema.CHANCE
    prob = _node_column(obj, "prob", n, 1.0, required=under_chance)
    _demand(
        np.abs(reward) <= schema.MAX_UTILITY,
        "reward",
        nodes,
        reward,
        f"must be at most {schema.MAX_UTILITY:g} in size",
    )
    _demand((discount > 0) & (discount <= 1), "discount", nodes, discount, "must be above 0 and at most 1")
    for name, column, neutral in (("reward", reward, 0.0), ("discount", discount, 1.0), ("prob", prob, 1.0)):
        if column[0] != neutral:
            raise InputError(f"{name}[0]", f"must be {neutral:g} or null at the root", float(column[0]))
    _demand(prob >= 0, "prob", nodes, prob, "must be >= 0")
    _demand(under_chance | (prob == 1), "prob", nodes, prob, "must be 1 or null unless under a chance node")
    total = np.bincount(parent[1:], weights=prob[1:], minlength=n)
    bad = (kind == schema.CHANCE) & (np.abs(total - 1) > _PROB_SUM_SLACK)
    for i in np.flatnonzero(bad):
        raise InputError(f"prob under node {i}", "must sum to 1 within 1e-9", float(total[i]))
    return reward, discount, prob


def _belief_kind(obj: dict[str, Any]) -> bool:
    gaussian = [k for k in (*schema.GAUSSIAN_COLUMNS, "cov") if obj.get(k) is not None]
    win_loss = [k for k in schema.WIN_LOSS_COLUMNS if obj.get(k) is not None]
    if gaussian and win_loss:
        raise InputError(
            f"keys {gaussian[0]!r} and {win_loss[0]!r}", "must not be mixed: one belief kind a tree"
        )
    if not gaussian and not win_loss:
        raise InputError("record", "must have leaf columns mean, var, noise_var or alpha, beta, low, high")
    return bool(gaussian)


def _belief_rules(fields: dict[str, Floats], leaves: Ints, gaussian: bool) -> None:
    if gaussian:
        _demand_size(fields, "mean", leaves, schema.MAX_UTILITY)
        for name in ("var", "noise_var"):
            if name in fields:
                _demand_size(fields, name, leaves, schema.MAX_VARIANCE)
        if "var" in fields:
            _demand(fields["var"] >= 0, "var", leaves, fields["var"], "must be >= 0")
        _demand(fields["noise_var"] > 0, "noise_var", leaves, fields["noise_var"], "must be > 0")
        return
    for name in ("alpha", "beta"):
        _demand(fields[name] > 0, name, leaves, fields[name], "must be > 0")
        _demand_size(fields, name, leaves, float(schema.MAX_ROLLOUTS))
    for name in ("low", "high"):
        _demand_size(fields, name, leaves, schema.MAX_UTILITY)
    _demand(fields["high"] > fields["low"], "high", leaves, fields["high"], "must be above 'low'")


def _covariance(value: object, n: int) -> Floats:
    if (
        not isinstance(value, list)
        or len(value) != n
        or any(not isinstance(r, list) or len(r) != n for r in value)
    ):
        raise InputError("cov", f"must be {n} rows of {n} numbers, the leaves in node order")
    cov = np.array([[_number(x, f"cov[{i}][{j}]") for j, x in enumerate(row)] for i, row in enumerate(value)])
    top = float(np.abs(cov).max())
    if top > schema.MAX_VARIANCE:
        i, j = np.unravel_index(np.abs(cov).argmax(), cov.shape)
        raise InputError(
            f"cov[{i}][{j}]", f"must be at most {schema.MAX_VARIANCE:g} in size", float(cov[i, j])
        )
    for i in np.flatnonzero(np.diag(cov) < 0):
        raise InputError(f"cov[{i}][{i}]", "must be >= 0", float(cov[i, i]))
    gap = np.abs(cov - cov.T)
    if gap.max() > _COV_SLACK * top:
        i, j = np.unravel_index(gap.argmax(), gap.shape)
        raise InputError(
            f"cov[{i}][{j}]", f"must equal cov[{j}][{i}] = {float(cov[j, i])!r}", float(cov[i, j])
        )
    cov = (cov + cov.T) / 2
    if top > 0:
        least = float(np.linalg.eigvalsh(cov / top)[0] * top)
        if least < -_COV_SLACK * top * n:
            raise InputError("cov", "must be positive semidefinite: no eigenvalue below 0", least)
    return np.asarray(cov)


def _scalars(obj: dict[str, Any], gaussian: bool) -> dict[str, Any]:
    out: dict[str, Any] = {}
    h = obj.get("horizon")
    if h is not None:
        out["horizon"] = math.inf if h == "inf" else _number(h, "horizon", 'must be a number or "inf"')
        if out["horizon"] < 0:
            raise InputError("horizon", "must be >= 0", h)
        if not gaussian and math.isfinite(out["horizon"]) and out["horizon"] != int(out["horizon"]):
            raise InputError("horizon", 'must be whole or "inf" for win/loss leaves', h)
    for name, least in (("batch", 1), ("remaining", 0)):
        v = obj.get(name)
        if v is not None:
            if isinstance(v, float) and v.is_integer():
                v = int(v)
            if type(v) is not int or not least <= v <= schema.MAX_ROLLOUTS:
                raise InputError(name, f"must be a whole number from {least} to 2^53", v)
            out[name] = v
    if obj.get("id") is not None:
        if type(obj["id"]) not in (str, int):
            raise InputError("id", "must be text or a whole number", obj["id"])
        out["id"] = obj["id"]
    if obj.get("extra") is not None:
        if not isinstance(obj["extra"], dict):
            raise InputError("extra", "must be an object", obj["extra"])
        _finite(obj["extra"], "extra")
        out["extra"] = obj["extra"]
    return out


def _list(obj: dict[str, Any], name: str, length: int | None = None) -> list[Any]:
    if obj.get(name) is None:
        raise InputError(name, "is missing")
    value = obj[name]
    if not isinstance(value, list):
        raise InputError(name, "must be an array over nodes", value)
    if length is not None and len(value) != length:
        raise InputError(name, f"must have {length} entries, one a node", len(value))
    return value


def _number(x: object, place: str, rule: str = "must be a number") -> float:
    if type(x) not in (int, float):
        raise InputError(place, rule, x)
    try:
        f = float(x)  # type: ignore[arg-type]
    except OverflowError:
        f = math.inf
    if not math.isfinite(f):
        raise InputError(place, "must be finite in double precision", x)
    return f


def _node_column(
    obj: dict[str, Any], name: str, n: int, default: float, required: NDArray[np.bool_] | None = None
) -> Floats:
    """A column over nodes; null takes the default, except where `required`."""
    if obj.get(name) is None:
        values: list[Any] = [None] * n
    else:
        values = _list(obj, name, n)
    out = np.full(n, default)
    for i, x in enumerate(values):
        if x is not None:
            out[i] = _number(x, f"{name}[{i}]")
        elif required is not None and required[i]:
            raise InputError(f"{name}[{i}]", "must be given under a chance node")
    return out


def _leaf_column(obj: dict[str, Any], name: str, n: int, is_leaf: NDArray[np.bool_]) -> Floats:
    """A column over nodes that holds numbers on leaves and null elsewhere, cut to the leaves."""
    values = _list(obj, name, n)
    out = []
    for i, x in enumerate(values):
        if is_leaf[i]:
            if x is None:
                raise InputError(f"{name}[{i}]", "must be given on a leaf")
            out.append(_number(x, f"{name}[{i}]"))
        elif x is not None:
            raise InputError(f"{name}[{i}]", "must be null: the node is no leaf", x)
    return np.array(out)


def _demand(ok: NDArray[np.bool_], name: str, nodes: Ints, values: Floats, rule: str) -> None:
    bad = np.flatnonzero(~ok)
    if len(bad):
        raise InputError(f"{name}[{nodes[bad[0]]}]", rule, float(values[bad[0]]))


def _demand_size(fields: dict[str, Floats], name: str, leaves: Ints, most: float) -> None:
    _demand(np.abs(fields[name]) <= most, name, leaves, fields[name], f"must be at most {most:g} in size")


def to_record(tree: BeliefTree) -> dict[str, Any]:
    """The `belief-tree/1` record of a tree; `from_record(to_record(t))` gives `t` back, bit for bit.

    Columns that hold only their default are left out.
    """
    leaves = tree.leaf_nodes.tolist()

    def spread(column: Floats) -> list[float | None]:
        out: list[float | None] = [None] * tree.n_nodes
        for node, x in zip(leaves, column.tolist(), strict=True):
            out[node] = x
        return out

    record: dict[str, Any] = {
        "format": schema.TREE_FORMAT,
        "parent": tree.parent.tolist(),
        "kind": [schema.KINDS[k] for k in tree.kind],
    }
    for name, column, default in (("reward", tree.reward, 0), ("discount", tree.discount, 1)):
        if np.any(column != default):
            record[name] = column.tolist()
    if tree.has_chance:
        under_chance = [p >= 0 and tree.kind[p] == schema.CHANCE for p in tree.parent]
        record["prob"] = [p if u else None for p, u in zip(tree.prob.tolist(), under_chance, strict=True)]
    for name in (*schema.GAUSSIAN_COLUMNS, *schema.WIN_LOSS_COLUMNS, "count"):
        if getattr(tree, name) is not None:
            record[name] = spread(getattr(tree, name))
    assert tree.cost is not None
    if np.any(tree.cost != 0):
        record["cost"] = spread(tree.cost)
    if tree.cov is not None:
        record["cov"] = tree.cov.tolist()
    if tree.horizon is not None:
        record["horizon"] = "inf" if math.isinf(tree.horizon) else tree.horizon
    for name in ("batch", "remaining", "id", "extra"):
        if getattr(tree, name) is not None:
            record[name] = getattr(tree, name)
    return record
