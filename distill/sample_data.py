"""The families and traces that come with the tool; floor 0.

In an installed wheel they lie in the package, in a checkout under `datasets/`.
"""

from __future__ import annotations

from pathlib import Path

from distill.errors import InputError

__all__ = ["FAMILIES", "TRACES", "family_path"]

_PACKAGED = Path(__file__).parent / "data"
_ROOT = _PACKAGED if _PACKAGED.is_dir() else Path(__file__).parents[1] / "datasets"
FAMILIES = _ROOT / "families"
TRACES = _ROOT / "traces"


def family_path(name_or_file: str) -> Path:
    """The family file of that path, or the one of that name that comes with the tool.

    >>> family_path("cold-store").name
    'cold-store.toml'
    """
    path = Path(name_or_file)
    if path.suffix == ".toml" or path.exists():
        return path
    if (FAMILIES / f"{name_or_file}.toml").exists():
        return FAMILIES / f"{name_or_file}.toml"
    names = ", ".join(sorted(p.stem for p in FAMILIES.glob("*.toml")))
    raise InputError("family", f"must be a .toml file or one of {names}", name_or_file)
