"""How every kernel of the project is compiled; floor 0.

Numba keeps compiled code on disk and recompiles when the file of a function changes. It does not notice a
change in a file that the function calls into, and would go on with numbers of the old code. Here a kernel's
stamp covers its own file and every file of the package that it imports, directly or not.
"""

from __future__ import annotations

import contextlib
import hashlib
import re
from collections.abc import Callable
from functools import cache
from pathlib import Path
from typing import Any, TypeVar

from numba import njit

__all__ = ["compiled", "stamp"]

_F = TypeVar("_F", bound=Callable[..., Any])
_PACKAGE = Path(__file__).parent
_IMPORT = re.compile(r"^(?:from|import) (distill[\w.]*)(?: import \(?([\w\s,]*))?", re.MULTILINE)


def compiled(function: _F) -> _F:
    """The function compiled by Numba, cached on disk where that is possible.

    Division by zero as in NumPy; no fast-math, which would spend the relative accuracy of the tails.

    >>> compiled(lambda x: 2 * x)(21)
    42
    """
    try:
        kernel: Any = njit(cache=True, error_model="numpy")(function)
    except RuntimeError:  # nowhere to keep it: not in a file, or no folder can be written
        return njit(error_model="numpy")(function)  # type: ignore[no-any-return]
    # The cache compares this stamp with the one that it was saved with. Should a later Numba name it
    # otherwise, its own stamp of the one file is left.
    with contextlib.suppress(AttributeError):
        file = kernel._cache._cache_file
        file._source_stamp = (file._source_stamp, stamp(Path(function.__code__.co_filename)))
    return kernel  # type: ignore[no-any-return]


def stamp(file: Path) -> str:
    """SHA-256 over a source file and all files of the package that it imports.

    >>> stamp(Path(__file__)) == stamp(Path(__file__)), len(stamp(Path(__file__)))
    (True, 64)
    """
    digest = hashlib.sha256()
    for path in sorted(_reach(file)):
        digest.update(_content(path))
    return digest.hexdigest()


def _reach(file: Path) -> set[Path]:
    found: set[Path] = set()
    left = [file.resolve()]
    while left:
        path = left.pop()
        if path not in found and path.is_file():
            found.add(path)
            left.extend(_imported(path))
    return found


@cache
def _content(path: Path) -> bytes:
    return path.read_bytes()


@cache
def _imported(path: Path) -> tuple[Path, ...]:
    out = []
    for module, names in _IMPORT.findall(_content(path).decode()):
        folder = _PACKAGE.joinpath(*module.split(".")[1:])
        out.append(folder.with_suffix(".py"))
        out += [folder / f"{name.split()[0]}.py" for name in names.split(",") if name.strip()]
    return tuple(out)
