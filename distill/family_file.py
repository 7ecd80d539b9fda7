"""The family file: TOML that describes a distribution over belief trees; floor 2.

Every field is a distribution: a number (always that), [a, b] (uniform between, whole numbers for whole
fields), or a table with one of
    uniform = [a, b]
    log_uniform = [a, b]         0 < a <= b
    normal = [mean, sd]          for rewards and means only
    choice = [x, y, ...]         optionally with weights = [..]
Infinity, in TOML inf, stands for the dynamic value: budget.horizon may be inf, or have it among its choices.
`FIELDS` lists all of them with bounds and defaults; datasets/README.md explains them by example.
"""

from __future__ import annotations

import hashlib
import json
import math
import os
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final

import numpy as np

from distill import schema
from distill.errors import InputError
from distill.tree import Floats

__all__ = ["Distribution", "Family", "load_family", "parse_family"]

_MOST_LEAVES: Final = 65_536
_MOST_CORRELATED: Final = 1_024  # their covariance is written out in full


@dataclass(frozen=True)
class Distribution:
    """One field's distribution. kind: 'uniform', 'log_uniform', 'normal' or 'choice'.

    `args` are the two numbers, or the choices; `shares` the cumulative weights of choices.

    >>> Distribution("uniform", (2, 6), whole=True).draw(np.random.default_rng(1), 5)
    array([4., 6., 2., 6., 3.])
    """

    kind: str
    args: tuple[float, ...]
    whole: bool = False
    shares: tuple[float, ...] = ()

    @property
    def always(self) -> float | None:
        """The value, where there is only one."""
        return self.args[0] if len(set(self.args)) == 1 and self.kind != "normal" else None

    @property
    def support(self) -> tuple[float, float]:
        """The smallest and the largest value that can be drawn."""
        return (-math.inf, math.inf) if self.kind == "normal" else (min(self.args), max(self.args))

    @property
    def content(self) -> list[Any]:
        """What is drawn, as JSON values; the same for two ways to write it."""
        if self.always is not None:
            return [float(self.always)]
        weights = [float(w / self.shares[-1]) for w in self.shares]
        return [self.kind, self.whole, [float(x) for x in self.args], weights]

    def draw(self, rng: np.random.Generator, size: int) -> Floats:
        """`size` independent values, float64."""
        if self.always is not None:
            return np.full(size, float(self.always))
        if self.kind == "choice":
            at = np.searchsorted(self.shares, rng.random(size) * self.shares[-1], side="right")
            return np.array(self.args, dtype=float)[np.minimum(at, len(self.args) - 1)]
        a, b = self.args
        if self.kind == "normal":
            return a + b * rng.standard_normal(size)
        top = b + 1 if self.whole else b
        if self.kind == "uniform":
            x = a + (top - a) * rng.random(size)
        else:
            x = np.exp(math.log(a) + (math.log(top) - math.log(a)) * rng.random(size))
        return np.clip(np.floor(x) if self.whole else x, a, b)

    def one(self, rng: np.random.Generator) -> float:
        """A single value."""
        return float(self.args[0]) if self.always is not None else float(self.draw(rng, 1)[0])


@dataclass(frozen=True)
class _Field:
    """What one field of the file may hold; `default` None means it must be given."""

    default: float | None
    low: float
    high: float
    whole: bool = False
    normal: bool = False  # a normal distribution is allowed: the bounds hold for its mean and sd
    scalar: bool = False  # a plain number, not a distribution
    infinite: bool = False  # infinity may stand alone or among choices, above the bounds


# The bounds keep every product and square of fields far inside double precision's range.
def _any(default: float | None, normal: bool = False) -> _Field:
    return _Field(default, -1e9, 1e9, normal=normal)


def _positive(default: float | None) -> _Field:
    return _Field(default, 1e-9, 1e9)


_SHAPE: Final = {
    "actions": _Field(None, 1, _MOST_LEAVES, whole=True),
    "leaves": _Field(None, 1, _MOST_LEAVES, whole=True),
    "depth": _Field(2, 1, 64, whole=True),
    "branching": _Field(3, 2, _MOST_LEAVES, whole=True),
}
_SEARCH: Final = {
    "even": _Field(0, 0, 1e9, scalar=True),
    "uct": _Field(0, 0, 1e9, scalar=True),
    "thompson": _Field(0, 0, 1e9, scalar=True),
    "static_rate": _Field(0, 0, 1e9, scalar=True),
    "switch": _Field(0, 0, 1, scalar=True),
    "exploration": _Field(1, 0, 1e9),
    "batch": _Field(1, 1, 1e6, whole=True),
}
_COMMON: Final = {
    "shape": _SHAPE,
    "edge": {"reward": _any(0, normal=True), "discount": _Field(1, 1e-3, 1)},
    "chance": {
        "share": _Field(None, 0, 1, scalar=True),
        "evenness": _Field(1, 1e-3, 1e6),
    },
    "cost": {"tree": _Field(0, 0, 1e9), "leaf": _Field(1, 0, 1e9)},
    "budget": {
        "rollouts": _Field(None, 1, 1e6, whole=True),
        "used": _Field(None, 0, 1),
        "fresh": _Field(0, 0, 1, scalar=True),
        "horizon": _Field(None, 0, 1e9, infinite=True),
        "batch": _Field(None, 1, 1e6, whole=True),
    },
    "search": _SEARCH,
}
# Sections by belief, then field -> rule. Lengths of value are in units of `prior.scale`.
FIELDS: Final[dict[str, dict[str, dict[str, _Field]]]] = {
    "gaussian": {
        **_COMMON,
        "prior": {
            "scale": _positive(1),
            "action": _any(0, normal=True),
            "mean": _any(0, normal=True),
            "tree_sd": _Field(1, 0, 1e9),
            "sd": _Field(None, 0, 1e9),
        },
        "noise": {"tree_sd": _positive(1), "sd": _positive(None)},
        "correlation": {"shared": _Field(None, 0, 1)},
    },
    "win_loss": {
        **_COMMON,
        "prior": {
            "scale": _positive(1),
            "strength": _Field(None, 1e-3, 1e9),
            "win_rate": _Field(None, 1e-9, 1 - 1e-9),
            "low": _any(0),
            "span": _positive(1),
        },
    },
}
_OPTIONAL_SECTIONS: Final = ("edge", "chance", "cost", "correlation")
_OPTIONAL_FIELDS: Final = ("budget.horizon", "budget.batch")


@dataclass(frozen=True)
class Family:
    """A validated family: draw from it with `distill.family.draw`.

    name, description, belief : from the file. text, sha256 : the file and its hash, for datasets.
    fields : "section.field" -> Distribution; sections that the file leaves out and that have no
        meaning then (chance, correlation) are absent.
    """

    name: str
    belief: str
    description: str
    text: str = field(repr=False)
    sha256: str
    fields: Mapping[str, Distribution] = field(repr=False)

    def __getitem__(self, key: str) -> Distribution:
        return self.fields[key]

    def has(self, section: str) -> bool:
        """Whether the file has this optional section."""
        return any(key.startswith(section + ".") for key in self.fields)

    def number(self, key: str) -> float:
        """The value of a plain-number field."""
        return float(self.fields[key].args[0])

    @property
    def content(self) -> str:
        """SHA-256 of what is drawn from, whatever the file's comments, order, spelling and name.

        Fields at their default count as left out.
        """
        rules = FIELDS[self.belief]
        said: dict[str, Any] = {}
        for key, distribution in self.fields.items():
            section, name = key.split(".")
            default = rules[section][name].default
            if default is None or distribution.always != default:
                said[key] = distribution.content
        return hashlib.sha256(json.dumps([self.belief, said], sort_keys=True).encode()).hexdigest()


def load_family(path: str | os.PathLike[str]) -> Family:
    """The family in a TOML file; InputError names file, key, rule and value."""
    try:
        data = Path(path).read_bytes()
    except OSError as e:
        raise InputError(str(path), f"must be a readable file ({e.strerror})") from None
    return parse_family(data, str(path))


def parse_family(data: bytes, place: str = "family") -> Family:
    """The family in TOML bytes; `place` starts every error.

    >>> parse_family(b'format = "tree-family/1"\\nname = "x"\\nbelief = "coin"')
    Traceback (most recent call last):
    distill.errors.InputError: family: belief: must be one of gaussian, win_loss; got 'coin'
    """
    try:
        obj = tomllib.loads(data.decode("utf-8"))
    except UnicodeDecodeError as e:
        raise InputError(f"{place}: byte {e.start}", "must be UTF-8 text") from None
    except (tomllib.TOMLDecodeError, RecursionError, ValueError) as e:
        raise InputError(place, f"must be valid TOML ({e})") from None
    try:
        return _family(obj, data)
    except InputError as e:
        raise e.at(place) from None


def _family(obj: dict[str, Any], data: bytes) -> Family:
    text = {}
    for key, required in (("format", True), ("name", True), ("belief", True), ("description", False)):
        if key not in obj and required:
            raise InputError(key, "is missing")
        text[key] = obj.get(key, "")
        if not isinstance(text[key], str) or (required and not text[key]):
            raise InputError(key, "must be text", text[key])
    if not text["name"].isprintable() or len(text["name"]) > 80:
        raise InputError("name", "must be one printable line of at most 80 characters", text["name"])
    if text["format"] != schema.FAMILY_FORMAT:
        raise InputError("format", f"must be {schema.FAMILY_FORMAT!r}", text["format"])
    if text["belief"] not in FIELDS:
        raise InputError("belief", f"must be one of {', '.join(FIELDS)}", text["belief"])
    sections = FIELDS[text["belief"]]
    for key, value in obj.items():
        if key not in sections and key not in text:
            raise InputError(f"key {key!r}", f"is not a key of a {text['belief']} {schema.FAMILY_FORMAT}")
        if key in sections and not isinstance(value, dict):
            raise InputError(key, "must be a table", value)
    fields: dict[str, Distribution] = {}
    for section, rules in sections.items():
        given = obj.get(section)
        if given is None:
            if section not in _OPTIONAL_SECTIONS:
                raise InputError(section, "is missing; must be a table")
            if any(rule.default is None for rule in rules.values()):
                continue
            given = {}
        for key in given:
            if key not in rules:
                raise InputError(f"key '{section}.{key}'", f"is not a key of a {schema.FAMILY_FORMAT}")
        for key, rule in rules.items():
            place = f"{section}.{key}"
            if key in given:
                fields[place] = _distribution(given[key], place, rule)
            elif rule.default is not None:
                fields[place] = Distribution("choice", (rule.default,), rule.whole, (1.0,))
            elif place not in _OPTIONAL_FIELDS:
                raise InputError(place, "is missing")
    _across(fields)
    digest = hashlib.sha256(data).hexdigest()
    return Family(text["name"], text["belief"], text["description"], data.decode(), digest, fields)


def _across(fields: dict[str, Distribution]) -> None:
    """Rules that join several fields."""
    most = fields["shape.actions"].support[1] * fields["shape.leaves"].support[1]
    limit = _MOST_CORRELATED if "correlation.shared" in fields else _MOST_LEAVES
    if most > limit:
        raise InputError(
            "shape.leaves", f"times shape.actions must be at most {limit} leaves a tree", int(most)
        )
    if "prior.span" in fields:
        size = max(abs(x) for x in fields["prior.low"].support)
        if fields["prior.span"].support[0] < 1e-9 * size:
            raise InputError(
                "prior.span",
                f"must be at least 1e-9 of prior.low's size, {size:g}",
                fields["prior.span"].support[0],
            )
    if sum(fields[f"search.{rule}"].args[0] for rule in ("even", "uct", "thompson", "static_rate")) <= 0:
        raise InputError("search", "must give some allocation rule a weight above 0")


def _distribution(value: object, place: str, rule: _Field) -> Distribution:
    if rule.scalar or not isinstance(value, list | dict):
        one = _number(value, place, rule.whole, rule.infinite)
        out = Distribution("choice", (one,), rule.whole, (1.0,))
    elif isinstance(value, list):
        out = _pair("uniform", value, place, rule)
    else:
        kinds = [k for k in value if k != "weights"]
        if len(kinds) != 1 or kinds[0] not in ("uniform", "log_uniform", "normal", "choice"):
            raise InputError(place, "must have exactly one of uniform, log_uniform, normal, choice", value)
        kind = kinds[0]
        if "weights" in value and kind != "choice":
            raise InputError(f"{place}.weights", "must stand beside 'choice' only", value["weights"])
        if kind == "choice":
            out = _choice(value, place, rule)
        else:
            out = _pair(kind, value[kind], f"{place}.{kind}", rule)
    bounds = f"at least {rule.low:g} and at most {rule.high:g}"
    if out.kind == "normal" and not rule.normal:
        raise InputError(place, f"must not be normal: it must be {bounds}", list(out.args))
    if rule.infinite:
        bounds += ", or infinite"
    for x in out.args:
        if not rule.low <= x <= rule.high and not (rule.infinite and x == math.inf):
            raise InputError(place, f"must be {bounds}", x)
    return out


def _pair(kind: str, value: object, place: str, rule: _Field) -> Distribution:
    if not isinstance(value, list) or len(value) != 2:
        raise InputError(place, "must be two numbers", value)
    a, b = (_number(x, f"{place}[{i}]", rule.whole) for i, x in enumerate(value))
    if kind == "normal":
        if b < 0:
            raise InputError(f"{place}[1]", "must be >= 0: it is a standard deviation", b)
    elif a > b:
        raise InputError(place, "must have its first number at most its second", value)
    if kind == "log_uniform" and a <= 0:
        raise InputError(f"{place}[0]", "must be above 0", a)
    return Distribution(kind, (a, b), rule.whole)


def _choice(value: dict[str, Any], place: str, rule: _Field) -> Distribution:
    items = value["choice"]
    if not isinstance(items, list) or not items:
        raise InputError(f"{place}.choice", "must be a list of numbers", items)
    numbers = tuple(
        _number(x, f"{place}.choice[{i}]", rule.whole, rule.infinite) for i, x in enumerate(items)
    )
    weights = value.get("weights", [1] * len(items))
    if not isinstance(weights, list) or len(weights) != len(items):
        raise InputError(f"{place}.weights", f"must be {len(items)} numbers, one a choice", weights)
    share = [_number(w, f"{place}.weights[{i}]", False) for i, w in enumerate(weights)]
    for i, w in enumerate(share):
        if not 0 <= w <= 1e9:
            raise InputError(f"{place}.weights[{i}]", "must be at least 0 and at most 1e+09", w)
    if sum(share) <= 0:
        raise InputError(f"{place}.weights", "must not all be 0", weights)
    return Distribution("choice", numbers, rule.whole, tuple(np.cumsum(share).tolist()))


def _number(x: object, place: str, whole: bool, infinite: bool = False) -> float:
    if type(x) not in (int, float):
        raise InputError(place, "must be a number", x)
    try:
        f = float(x)  # type: ignore[arg-type]
    except OverflowError:
        f = math.inf
    if not math.isfinite(f) and not (infinite and x == math.inf):
        raise InputError(place, "must be finite", x)
    if whole and f != int(f):
        raise InputError(place, "must be a whole number", x)
    return f
