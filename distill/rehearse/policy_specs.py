"""Policies by text, as the command line takes them: NAME, then options NAME:key=value:key=value."""

from __future__ import annotations

import inspect
import math
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any, Final

from distill import voc
from distill.errors import InputError
from distill.rehearse.policies import ByRule, Policy, TopTwoThompson, WithPrior
from distill.rehearse.value_policies import ByScorer, ByValue

__all__ = ["POLICIES", "make_policy", "scorer_file"]


def _even() -> Policy:
    return ByRule("even")


def _uct(c: float = 1.0) -> Policy:
    return ByRule("uct", exploration=c)


def _thompson(prior: float = 1.0) -> Policy:
    return _with_prior(ByRule("thompson"), prior)


def _top_two(share: float = 0.5, prior: float = 1.0) -> Policy:
    return _with_prior(TopTwoThompson(share), prior)


def _with_prior(policy: Policy, width: float) -> Policy:
    return policy if width == 1 else WithPrior(policy, width)


def _static_voc() -> Policy:
    return ByRule("static_voc")


def _static_rate(prior: float = 1.0) -> Policy:
    return _with_prior(ByRule("static_rate"), prior)


def _exact(horizon: float, rate: bool) -> Callable[..., Policy]:
    def make(commit: bool = False, stop: float = 0.0) -> Policy:
        return ByValue(voc.price, horizon=horizon, rate=rate, commit=commit, stop=stop)

    return make


def _exact_horizon(h: float = 4.0, rate: bool = True, stop: float = 0.0) -> Policy:
    return ByValue(voc.price, horizon=h, rate=rate, stop=stop)


def _scorer(
    file: str,
    late: float = 0.0,
    every: int = 0,
    share: float = 0.0,
    stop: float = 0.0,
    prior: float = 1.0,
    name: str = "",
) -> Policy:
    policy = ByScorer(file, late=late, every=every, share=share, stop=stop, name=name)
    return _with_prior(policy, prior)


# name -> maker; its parameters are the options.
POLICIES: Final[Mapping[str, Callable[..., Policy]]] = {
    "even": _even,
    "uct": _uct,
    "thompson": _thompson,
    "top-two": _top_two,
    "static-voc": _static_voc,
    "static-rate": _static_rate,
    "exact-static-rate": _exact(0.0, True),
    "exact-dynamic": _exact(math.inf, False),
    "exact-dynamic-rate": _exact(math.inf, True),
    "exact-horizon": _exact_horizon,
    "scorer": _scorer,
}


def make_policy(text: str) -> Policy:
    """The policy that a text names; InputError says what of it is not known.

    >>> make_policy("uct:c=2").name, make_policy("thompson:prior=0.5").name
    ('uct-2', 'thompson-prior0.5')
    >>> make_policy("scorer:models/cold-store-fast.onnx:every=4").name
    'cold-store-fast-every4'
    """
    name, *options = text.split(":")
    if name not in POLICIES:
        raise InputError(f"policy {text!r}", f"must begin with one of {', '.join(POLICIES)}", name)
    maker = POLICIES[name]
    kinds = {key: type(p.default) for key, p in inspect.signature(maker).parameters.items()}
    given: dict[str, Any] = {}
    if name == "scorer":
        given["file"], options = scorer_file(text)
        if not given["file"]:
            raise InputError(f"policy {text!r}", "must name a file: scorer:FILE.onnx")
        if not Path(given["file"]).is_file():
            raise InputError(f"policy {text!r}", "must name a file that exists", given["file"])
    for option in options:
        key, _, value = option.partition("=")
        if key not in kinds or key == "file":
            known = ", ".join(k for k in kinds if k != "file") or "none"
            raise InputError(f"policy {text!r}", f"options of {name} are: {known}", key)
        given[key] = _read(kinds[key], value, f"policy {text!r}: {key}")
    return maker(**given)


def scorer_file(text: str) -> tuple[str, list[str]]:
    """File and options of a scorer policy's text. The path may hold colons, and even "=" where it exists.

    >>> scorer_file("scorer:C:/models/a.onnx:every=4:stop=auto")
    ('C:/models/a.onnx', ['every=4', 'stop=auto'])
    """
    file, options = text.partition(":")[2], list[str]()
    while ":" in file and "=" in file.rpartition(":")[2] and not Path(file).is_file():
        file, _, option = file.rpartition(":")
        options.insert(0, option)
    return ("", [file]) if "=" in file and not options and not Path(file).is_file() else (file, options)


def _read(kind: type, value: str, place: str) -> Any:
    if kind is str:
        return value
    if kind is bool:
        if value not in ("", "yes", "no"):
            raise InputError(place, "must be yes or no", value)
        return value != "no"
    try:
        return kind(value)
    except ValueError:
        raise InputError(place, f"must be {'a whole number' if kind is int else 'a number'}", value) from None
