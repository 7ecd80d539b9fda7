"""Families that differ from a base family in one thing each, for every input of scorers; floor 5.

What counts as unlike depends on the input: Gaussian leaves can be noisier, win/loss leaves better known, and
a record holds chance nodes and correlation, which leaf tables cannot be told.
"""

from __future__ import annotations

import tomllib
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Final

from distill.errors import InputError
from distill.family import Family, parse_family
from distill.scorer_inputs import RECORD, InputKind

__all__ = ["GIVEN", "SHIFTS", "Shift", "out_of_reach", "shifted", "shifts_of"]

_Text = dict[str, Any]
_QUARTER: Final = 0.25


@dataclass(frozen=True)
class Shift:
    """One thing that is changed.

    words : what, for people. change : of the parsed family file. blind : a record says that leaves are
    independent.
    """

    words: str
    change: Callable[[_Text], None]
    blind: bool = False


# --- changes ---------------------------------------------------------------------------------------


def _everywhere(x: Any, change: Callable[[float], float]) -> Any:
    """Every number of a field changed, but for weights; a normal distribution keeps its shape when scaled."""
    if isinstance(x, dict):
        return {kind: y if kind == "weights" else _everywhere(y, change) for kind, y in x.items()}
    return [_everywhere(y, change) for y in x] if isinstance(x, list) else change(x)


def _times(section: str, key: str, factor: float, default: float = 1) -> Callable[[_Text], None]:
    def change(family: _Text) -> None:
        part = family.setdefault(section, {})
        part[key] = _everywhere(part.get(key, default), lambda x: x * factor)

    return change


def _rollouts(factor: float) -> Callable[[_Text], None]:
    def change(family: _Text) -> None:
        part = family["budget"]
        part["rollouts"] = _everywhere(part["rollouts"], lambda x: max(1, round(x * factor)))

    return change


def _nothing(family: _Text) -> None:
    del family


def _one_level_deeper(family: _Text) -> None:
    family["shape"]["depth"] = _everywhere(family["shape"].get("depth", 2), lambda x: x + 1)


def _wider_means(family: _Text) -> None:
    for key in ("action", "mean"):
        _times("prior", key, 4.0, 0)(family)


def _payoffs(family: _Text) -> None:
    family["prior"] |= {"low": {"uniform": [-0.5, 0.5]}, "span": {"log_uniform": [0.5, 2.0]}}


def _chance(family: _Text) -> None:
    family["chance"] = {"share": 0.5}


def _more_chance(family: _Text) -> None:
    part = family.setdefault("chance", {"share": 0.0})
    part["share"] = 1 - _QUARTER * (1 - part["share"])


def _fewer_chance(family: _Text) -> None:
    family["chance"]["share"] *= _QUARTER


def _correlation(family: _Text) -> None:
    family.setdefault("correlation", {"shared": [0.3, 0.7]})


# --- which shifts there are -----------------------------------------------------------------------


GIVEN: Final = "as given"  # the base family as it is
_SAME: Final = {GIVEN: Shift("nothing; fresh trees of the family", _nothing)}
_SHAPE: Final = {
    "leaves x4": Shift("four times the leaves of each action", _times("shape", "leaves", 4)),
    "one level deeper": Shift("every action one level deeper", _one_level_deeper),
}
_UNIT: Final = {
    "unit x1000": Shift("all values in a unit a thousand times smaller", _times("prior", "scale", 1000.0)),
}
_NOISE: Final = {
    "noise x4": Shift("noise of a rollout: standard deviation times 4", _times("noise", "tree_sd", 4.0)),
    "noise /4": Shift(
        "noise of a rollout: standard deviation divided by 4", _times("noise", "tree_sd", 0.25)
    ),
}
_MEANS: Final = {
    "wider means": Shift("prior means spread 4 times as wide beside the leaves' uncertainty", _wider_means),
}
_COUNTS: Final = {
    "prior counts x4": Shift(
        "what is known at first is worth 4 times as many trials", _times("prior", "strength", 4.0)
    ),
    "prior counts /4": Shift(
        "what is known at first is worth a quarter of the trials", _times("prior", "strength", 0.25)
    ),
    "rollouts x4": Shift("four times the rollouts of a search, spent and left", _rollouts(4.0)),
    "rollouts /4": Shift("a quarter of the rollouts of a search, spent and left", _rollouts(0.25)),
}
_PAYOFFS: Final = {
    "payoff ranges": Shift("each leaf pays from a low of -0.5 to 0.5 over a span of 0.5 to 2", _payoffs),
}
_TAKEN: Final = {
    "chance nodes": Shift("half of the inner nodes are chance nodes; taken for decision nodes", _chance),
}
_BLIND: Final = "leaves share {} of their variance; taken for independent"

# Belief of the base family and whether records are read -> name -> shift.
SHIFTS: Final[Mapping[tuple[str, bool], Mapping[str, Shift]]] = {
    ("gaussian", False): {
        **_SAME, **_NOISE, **_SHAPE, **_MEANS, **_UNIT, **_TAKEN,
        "correlation": Shift(_BLIND.format("0.3 to 0.7"), _correlation),
    },
    ("win_loss", False): {**_SAME, **_COUNTS, **_SHAPE, **_PAYOFFS, **_UNIT, **_TAKEN},
    ("gaussian", True): {
        **_SAME, **_NOISE, **_SHAPE, **_MEANS, **_UNIT,
        "more chance nodes": Shift("a quarter as many inner nodes are decision nodes", _more_chance),
        "fewer chance nodes": Shift("a quarter as many inner nodes are chance nodes", _fewer_chance),
        "correlation ignored": Shift(_BLIND.format("some"), _correlation, True),
    },
    ("win_loss", True): {
        **_SAME, **_COUNTS, **_SHAPE, **_PAYOFFS, **_UNIT,
        "more chance nodes": Shift("a quarter as many inner nodes are decision nodes", _more_chance),
        "fewer chance nodes": Shift("a quarter as many inner nodes are chance nodes", _fewer_chance),
    },
}  # fmt: skip


def shifts_of(family: Family, kind: InputKind) -> Mapping[str, Shift]:
    """Name -> shift, of a base family for scorers of an input kind."""
    return SHIFTS[family.belief, kind is RECORD]


def out_of_reach(family: Family, kind: InputKind) -> dict[str, str]:
    """Name -> why this family cannot be changed so."""
    out = {}
    for name in shifts_of(family, kind):
        share = family.number("chance.share") if family.has("chance") else 0.0
        if name == "fewer chance nodes" and share == 0:
            out[name] = "the family has no chance nodes"
        elif name == "more chance nodes" and share == 1:
            out[name] = "all inner nodes of the family are chance nodes"
        else:
            try:
                shifted(family, name, kind)
            except InputError as e:
                out[name] = str(e)
    return out


def shifted(family: Family, name: str, kind: InputKind) -> Family:
    """The family with one thing changed; its text says which. InputError for an unknown name, or where the
    changed family breaks a rule, such as one on the number of leaves."""
    known = shifts_of(family, kind)
    if name not in known:
        raise InputError("shift", f"must be one of {', '.join(known)}", name)
    text = tomllib.loads(family.text)
    known[name].change(text)
    text["name"] = f"{family.name}, {name}"[:80]
    text["description"] = f"Derived from {family.name}: {known[name].words}."
    return parse_family(_toml(text).encode(), text["name"])


def _toml(family: Mapping[str, Any]) -> str:
    """A family's parsed text as TOML again: texts first, then a section each."""

    def value(x: Any) -> str:
        if isinstance(x, dict):
            return "{ " + ", ".join(f"{key} = {value(y)}" for key, y in x.items()) + " }"
        if isinstance(x, list):
            return "[" + ", ".join(value(y) for y in x) + "]"
        return repr(x)

    def text(x: str) -> str:
        quoted = x.replace("\\", "\\\\").replace('"', '\\"')
        return '"' + "".join(c if c.isprintable() else f"\\U{ord(c):08x}" for c in quoted) + '"'

    lines = [f"{key} = {text(x)}" for key, x in family.items() if isinstance(x, str)]
    for section, fields in family.items():
        if isinstance(fields, dict):
            lines += ["", f"[{section}]", *(f"{key} = {value(x)}" for key, x in fields.items())]
    return "\n".join(lines) + "\n"
