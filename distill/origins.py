"""Where the trees of a dataset come from, so that two datasets can be told to draw on the same; floor 5.

An origin is the hash of recorded files, or that of a family and the seed. A family has two, of its text and
of its content: comments, order and spelling change the first alone, and the trees not at all.
"""

from __future__ import annotations

import contextlib
from collections.abc import Iterable, Mapping
from functools import cache
from typing import Any

from distill.errors import InputError
from distill.family_file import Family, load_family
from distill.sample_data import FAMILIES

__all__ = ["by_text", "origins", "same_family", "share_origin"]


def origins(manifest: Mapping[str, Any]) -> list[str]:
    """The origins of a dataset: a family with its seed, recorded files, parts of a mix, additions."""
    source, seed = manifest["source"], manifest["seed"]
    if source["kind"] == "traces":
        whole = [source["sha256"]]
    elif "family" in source:
        whole = [*_of_family(source["family"], seed), source["traces"]["sha256"]]
    else:
        whole = _of_family(source, seed)
    return sorted({*whole, *(addition["sha256"] for addition in manifest.get("added", ()))})


def share_origin(one: Iterable[str], other: Iterable[str]) -> bool:
    """Whether two lists of origins have one in common; older lists hold texts alone.

    Of those, families that come with the tool are known by their content too.
    """
    return not _with_content(one).isdisjoint(_with_content(other))


def same_family(family: Family, data: Mapping[str, Any]) -> bool:
    """Whether a dataset is of this family, by what a scorer's metadata keep of it.

    data : with `source_sha256`, `seed` and `drawn_from`, as far as they are known.
    """
    if family.sha256 == data.get("source_sha256"):
        return True
    return share_origin([f"{family.content} {data.get('seed')}"], data.get("drawn_from", ()))


def by_text(source: Any) -> Any:
    """A manifest's source without the content of families, which older manifests have not."""
    if not isinstance(source, dict):
        return source
    return {key: by_text(x) for key, x in source.items() if key != "content"}


def _of_family(told: Mapping[str, Any], seed: Any) -> list[str]:
    return [f"{told[key]} {seed}" for key in ("sha256", "content") if key in told]


def _with_content(found: Iterable[str]) -> set[str]:
    out = {origin for origin in found if isinstance(origin, str)}
    for origin in tuple(out):
        digest, _, seed = origin.partition(" ")
        if seed and digest in _known():
            out.add(f"{_known()[digest]} {seed}")
    return out


@cache
def _known() -> dict[str, str]:
    """Hash of the text -> hash of the content, of families that come with the tool."""
    out = {}
    for path in sorted(FAMILIES.glob("*.toml")):
        with contextlib.suppress(InputError):  # a checkout's file may be half written
            family = load_family(path)
            out[family.sha256] = family.content
    return out
