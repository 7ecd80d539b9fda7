"""From recorded trees to a family that `generate` draws from, with intervals, and what does not fit; floor 5.

Estimates are empirical Bayes: the spread of what single trees show, minus what chance alone spreads, is the
spread of the family. Intervals cover at the stated rate (95 %) and come from drawing whole decisions again.
"""

from __future__ import annotations

import math
import os
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np

from distill import schema
from distill.errors import InputError, RefusedError
from distill.estimates import (
    LEVEL,
    Estimated,
    bootstrap,
    by_group,
    field_text,
    number_text,
    proportion,
    two_sample,
)
from distill.family import Family, draw, parse_family
from distill.files import write_atomic
from distill.infer_beliefs import Prior, gaussian_beliefs, prior_of
from distill.infer_checks import MOST_HORIZONS, Finding, findings
from distill.infer_shape import shape_of
from distill.infer_win_loss import win_loss_beliefs
from distill.traces import BadLines, read_many
from distill.tree import BeliefTree, Floats
from distill.tree_columns import COLUMNS, decision_key, path_gains, tree_columns

__all__ = ["INFER_FORMAT", "Estimates", "Inferred", "estimate", "infer", "infer_files", "unit_of"]

INFER_FORMAT: Final = "voc-infer/1"
_COMPARED: Final = 400  # trees drawn from the family for the comparison
_QUARTILES: Final = (0.05, 0.25, 0.5, 0.75, 0.95)
_RULES: Final = ("even", "uct", "thompson", "static_rate")


@dataclass(frozen=True)
class Inferred:
    """family : parsed, so that it can be drawn from. parameters : name -> estimate. findings : what fits
    and what does not, in words. figures : all of it as JSON values, with the comparison's samples.
    """

    family: Family
    parameters: dict[str, Estimated]
    findings: list[Finding]
    figures: dict[str, Any]


def infer_files(
    paths: Sequence[str | os.PathLike[str]],
    out: str | os.PathLike[str],
    *,
    seed: int = 0,
    bad: BadLines | None = None,
) -> Inferred:
    """`infer` on trace files; writes the family to `out`, a .toml file, in one step.

    bad : takes in the bad records that are passed over; None raises the first.
    """
    if not str(out).endswith(".toml"):
        raise InputError(str(out), "must end in .toml")
    trees = [tree for _, tree in read_many(paths, bad or BadLines(strict=True))]
    names = ", ".join(Path(p).name for p in paths)
    inferred = infer(trees, name=Path(out).stem, source=names, seed=seed)
    write_atomic(out, inferred.family.text.encode())
    return inferred


def infer(
    trees: Sequence[BeliefTree], *, name: str = "inferred", source: str = "traces", seed: int = 0
) -> Inferred:
    """A family from recorded trees.

    name, source : stand in the family file. seed : of the bootstrap and of the drawn trees.
    Trees whose `extra` names a decision are its stages and are drawn again together. Raises InputError
    where there are fewer than two decisions, beliefs of two kinds, or no tree states `remaining`.
    """
    with np.errstate(all="ignore"):  # numbers out of bounds are refused where the family is parsed
        return _infer(trees, name, source, seed)


def _infer(trees: Sequence[BeliefTree], name: str, source: str, seed: int) -> Inferred:
    read = estimate(trees, seed=seed, source=source)
    toml, parameters, group = read.toml, read.parameters, read.group
    decisions, assumed = max(group) + 1, read.rules_assumed
    text = _text(name, source, trees, decisions, toml, parameters, assumed)
    try:
        family = parse_family(text.encode(), "inferred family")
    except InputError as e:
        raise RefusedError(f"{source}: no family file can hold what the traces show: {e}") from None
    found = findings(trees, group, read.priors, assumed, seed)
    figures = {
        "format": INFER_FORMAT,
        "name": name,
        "source": source,
        "belief": trees[0].belief,
        "trees": len(trees),
        "decisions": decisions,
        "level": LEVEL,
        "seed": seed,
        "parameters": {
            key: {**e.to_json(), "unit": unit_of(key, trees[0].belief)} for key, e in parameters.items()
        },
        "findings": [f.to_json() for f in found],
        "compared": _compare(trees, family, seed),
        "family": text,
    }
    return Inferred(family, parameters, found, figures)


# How a parameter's name begins -> its unit; the first that fits. Spreads of logs have none of these.
_UNITS: Final = {
    "root actions": "actions a tree",
    "leaves an action": "leaves",
    "depth": "edges",
    "budget": "rollouts",
    "strength": "rollouts' worth of prior",
    "prior sd, typical": "records' unit of value",
    "span, typical": "records' unit of value",
    **dict.fromkeys(("noise sd", "prior mean", "reward", "cost", "value of a loss"), "typical prior sds"),
}


def unit_of(parameter: str, belief: str = "gaussian") -> str:
    """The unit of a parameter that `infer` finds: two of them are values, and most are multiples of these.

    >>> unit_of("prior sd, typical"), unit_of("noise sd, typical"), unit_of("discount")
    ("records' unit of value", 'typical prior sds', '1')
    >>> unit_of("reward", "win_loss"), unit_of("cost, spread of log between trees")
    ('typical spans', 'sd of ln')
    """
    if "spread of log" in parameter:
        return "sd of ln"
    unit = next((unit for start, unit in _UNITS.items() if parameter.startswith(start)), "1")
    return "typical spans" if unit == "typical prior sds" and belief == "win_loss" else unit


@dataclass(frozen=True)
class Estimates:
    """What was read from traces: `parameters`, and the family's fields as text in `toml`.

    group : decision number of each tree. priors : of Gaussian trees. rules_assumed : whether no record names
    the rule that gave out rollouts.
    """

    parameters: dict[str, Estimated]
    toml: dict[str, dict[str, str]]
    group: list[int]
    priors: list[Prior] | None
    rules_assumed: bool


def estimate(trees: Sequence[BeliefTree], *, seed: int = 0, source: str = "traces") -> Estimates:
    """The parameters with their intervals; errors as for `infer`."""
    _check(trees)
    keys = [decision_key(tree) or f"tree {i}" for i, tree in enumerate(trees)]
    numbers = {key: j for j, key in enumerate(dict.fromkeys(keys))}
    group = [numbers[key] for key in keys]
    if len(numbers) < 2:
        raise InputError(source, "must hold trees of at least 2 decisions", len(numbers))
    priors = [prior_of(tree) for tree in trees] if trees[0].belief == "gaussian" else None
    shape = shape_of(trees, group, seed)
    if priors is None:
        beliefs = win_loss_beliefs(trees, group, seed)
    else:
        beliefs = gaussian_beliefs(trees, group, priors, seed)
    budget_toml, budget = _budget(trees, group, seed)
    rules, assumed = _rules(trees, group)
    toml: dict[str, dict[str, str]] = {**shape.toml, **beliefs.toml, "budget": budget_toml, "search": rules}
    gains = [path_gains(t) for t in trees]
    discounts = np.array([math.exp(logs.sum() / edges.sum()) for logs, edges in gains])
    toml.setdefault("edge", {})["discount"] = field_text(np.round(discounts, 12), digits=12)
    parameters = {**shape.parameters, **_discount(discounts, group, seed), **beliefs.parameters, **budget}
    return Estimates(parameters, toml, group, priors, assumed)


def _check(trees: Sequence[BeliefTree]) -> None:
    if not trees:
        raise InputError("traces", "must hold at least one readable record")
    if len({tree.belief for tree in trees}) > 1:
        raise InputError("traces", "must hold one kind of belief: a family is Gaussian or win/loss")
    if len({tree.cov is None for tree in trees}) > 1:
        raise InputError("traces", "must all have 'cov', or none: a family is correlated or not")
    if all(tree.remaining is None for tree in trees):
        raise InputError("traces: remaining", "must be given by some record: a family needs a whole budget")


def _discount(discounts: Floats, group: Sequence[int], seed: int) -> dict[str, Estimated]:
    sums = by_group([{"d": float(d), "n": 1.0} for d in discounts], group)
    return bootstrap(sums, lambda s: {"discount": s["d"] / s["n"]}, seed=seed)


def _budget(
    trees: Sequence[BeliefTree], group: Sequence[int], seed: int
) -> tuple[dict[str, str], dict[str, Estimated]]:
    """Budget of the whole search, share of it spent, probability of a fresh tree, horizon and batch."""
    rows = [(g, t) for g, t in zip(group, trees, strict=True) if t.remaining is not None]
    member = np.unique([g for g, _ in rows], return_inverse=True)[1].tolist()
    spent = np.array([0.0 if t.count is None else float(t.count.sum()) for _, t in rows])
    whole = spent + np.array([t.remaining for _, t in rows], dtype=float)
    whole = np.maximum(whole, 1)
    share, fresh = _spent_share(spent, whole)
    toml = {"rollouts": field_text(whole, whole=True), "used": share}
    if fresh > 0:
        toml["fresh"] = number_text(fresh)
    horizons = np.array([math.inf if t.horizon is None else t.horizon for t in trees])
    if np.all(np.isfinite(horizons)) or 1 < len(np.unique(horizons)) <= MOST_HORIZONS:
        toml["horizon"] = field_text(horizons, whole=trees[0].belief == "win_loss")
    if any(t.batch is not None for t in trees):
        toml["batch"] = field_text([1 if t.batch is None else t.batch for t in trees], whole=True)
    logs, shares = np.log(whole), spent / whole
    sums = by_group([{"n": 1.0, "log": a, "share": b} for a, b in zip(logs, shares, strict=True)], member)
    found = bootstrap(
        sums,
        lambda s: {
            "budget, typical": np.exp(s["log"] / s["n"]),
            "share of the budget spent": s["share"] / s["n"],
        },
        seed=seed,
    )
    found["trees with nothing spent, share"] = proportion(float(np.mean(spent == 0)), max(member) + 1)
    return toml, found


def _spent_share(spent: Floats, whole: Floats) -> tuple[str, float]:
    """`used` and `fresh`: the family spends floor(budget x used), or nothing with probability `fresh`."""
    low, high = spent / whole, (spent + 1) / whole
    if low.max() < high.min():
        return number_text(float(low.max())), 0.0
    some = spent > 0
    points, times = np.unique(np.round(low, 6), return_counts=True)
    if len(points) <= 8:
        weights = ", ".join(number_text(w) for w in times / len(low))
        return f"{{ choice = [{', '.join(map(number_text, points))}], weights = [{weights}] }}", 0.0
    a, b = float(low[some].min()), float(high[some].max())
    a = 0.0 if a < 2 / np.median(whole) or a < 0.02 else a
    b = 1.0 if b > 0.98 else b
    # A share drawn near 0 spends nothing either.
    by_chance = float(np.mean(np.clip((1 / whole - a) / (b - a), 0, 1)))
    fresh = max(float(np.mean(~some)) - by_chance, 0.0) / (1 - by_chance)
    return f"[{number_text(a)}, {number_text(b)}]", fresh


def _rules(trees: Sequence[BeliefTree], group: Sequence[int]) -> tuple[dict[str, str], bool]:
    """Weights of the allocation rules: as `extra.rule` names them, else assumed; and whether so."""
    named = {g: t.extra.get("rule") for g, t in zip(group, trees, strict=True) if t.extra is not None}
    times = {rule: sum(r == rule for r in named.values()) for rule in _RULES}
    if sum(times.values()) * 2 > len(set(group)):
        total = sum(times.values())
        return {rule: number_text(x / total) for rule, x in times.items() if x}, False
    counts = np.concatenate([np.zeros(1), *(t.count for t in trees if t.count is not None)]).astype(int)
    out = dict.fromkeys(_RULES, "1") | {"switch": "0.02"}
    step = int(np.gcd.reduce(counts))
    if step > 1:
        out["batch"] = str(step)
    return out, True


# --- the file --------------------------------------------------------------------------------------


def _text(
    name: str,
    source: str,
    trees: Sequence[BeliefTree],
    decisions: int,
    toml: dict[str, dict[str, str]],
    parameters: dict[str, Estimated],
    assumed: bool,
) -> str:
    plain = "".join(c if c.isprintable() and c not in '"\\' else "_" for c in name)[:80] or "inferred"
    said = "".join(c if c.isprintable() and c not in '"\\' else "_" for c in source)[:200]
    lines = [
        f"# Inferred from {len(trees)} recorded trees of {decisions} decisions.",
        f"# Estimates with {100 * LEVEL:g} % intervals (decisions drawn again):",
        *(
            f"#   {key} ({unit_of(key, trees[0].belief)}): {_interval_text(e)}"
            for key, e in parameters.items()
        ),
        "",
        f'format = "{schema.FAMILY_FORMAT}"',
        f'name = "{plain}"',
        f'description = "Inferred from {said}."',
        f'belief = "{trees[0].belief}"',
    ]
    order = ("shape", "chance", "edge", "prior", "correlation", "noise", "cost", "budget", "search")
    for section in order:
        if section in toml:
            lines += ["", f"[{section}]"]
            if section == "search" and assumed:
                lines.append("# Assumed: the traces do not name the rule that gave out the rollouts.")
            lines += [f"{key} = {value}" for key, value in toml[section].items()]
    return "\n".join(lines) + "\n"


def _interval_text(e: Estimated) -> str:
    if not math.isfinite(e.value):
        return "not to be told"
    return f"{e.value:.4g} [{e.low:.4g}, {e.high:.4g}]"


# --- the comparison --------------------------------------------------------------------------------


def _compare(trees: Sequence[BeliefTree], family: Family, seed: int) -> dict[str, Any]:
    """Column -> quantiles of the traces and of drawn trees, their distance, and what chance alone gives."""
    drawn = tree_columns([draw(family, seed, i) for i in range(_COMPARED)])
    seen = tree_columns(trees)
    out = {}
    for name in COLUMNS:
        a, b = (x[np.isfinite(x)] for x in (seen[name], drawn[name]))
        if len(a) == 0 and len(b) == 0:
            continue
        out[name] = {
            "meaning": COLUMNS[name],
            "traces": _quantiles(a),
            "drawn": _quantiles(b),
            "distance": two_sample(a, b),
        }
    return {"trees drawn": _COMPARED, "at": list(_QUARTILES), "columns": out}


def _quantiles(x: Floats) -> list[float]:
    return [float(f"{q:.6g}") for q in np.quantile(x, _QUARTILES)] if len(x) else []
