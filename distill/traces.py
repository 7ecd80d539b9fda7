"""Recorded trees: streams of `belief-tree/1` records in files or on standard input; floor 3.

`.jsonl` and `.jsonl.gz` hold one record a line (blank lines are skipped), `.json` one record or an array
of them, `-` is standard input as JSON Lines. Reading streams: memory is bounded by the
longest line, time by the size of the file, also for hostile ones.
"""

from __future__ import annotations

import gzip
import json
import os
import re
import sys
import zlib
from collections.abc import Callable, Iterable, Iterator, Sequence
from pathlib import Path
from typing import Any, BinaryIO, Final

from distill.errors import InputError
from distill.files import write_atomic
from distill.record import from_record, parse_json, to_record
from distill.tree import BeliefTree

__all__ = ["BadLines", "none_valid", "read_many", "read_trees", "write_trees"]

_SUFFIXES: Final = (".jsonl", ".jsonl.gz", ".json")
_MOST_LINE: Final = 64 * 2**20  # bytes; 1,024 leaves with all their covariance take about 20 MB
_MOST_RATIO: Final = 200  # unpacked bytes a packed byte: traces stay below 50, bombs reach 1,000
_MOST_BLANK: Final = 100_000
# Marks of JSON in a line, which bound what parsing takes: 65,536 leaves need a million commas, and so do
# 1,024 leaves with all their covariance.
_MOST_MARKS: Final = {b",": 4_000_000, b":": 500_000, b"[": 500_000, b"{": 500_000}
_MOST_NUMBERS: Final = 10_000  # bad lines whose numbers are kept
_FREE: Final = 2**20  # unpacked bytes that need no packed ones


def read_trees(
    source: str | os.PathLike[str], *, on_error: Callable[[InputError], None] | None = None
) -> Iterator[tuple[str, BeliefTree]]:
    """Yields (place, tree) for every record of a file, or of standard input for "-".

    place : file and line, e.g. "shift.jsonl line 3", to put in front of later errors.
    on_error : called with the InputError of each bad record, which is then passed over; None raises
        the first. Errors name line, key, rule and value.
    Raises InputError where the source cannot be read at all or holds no record.
    """
    name = str(source)
    found = False
    for place, data in _records(name):
        found = True
        try:
            if isinstance(data, InputError):
                raise data
            yield place, from_record(parse_json(data) if isinstance(data, bytes) else data)
        except InputError as e:
            if on_error is None:
                raise e.at(place) from None
            on_error(e.at(place))
    if not found:
        raise InputError(name, "must hold at least one record; it is empty")


class BadLines:
    """Counts bad records that are passed over, and says which; an `on_error` for `read_trees`.

    strict : raise the first instead. count : how many. Memory is bounded however many there are.

    >>> bad = BadLines()
    >>> for n in (2, 3, 4, 9):
    ...     bad(InputError(f"shift.jsonl line {n}: var[1]", "must be >= 0", -1.0))
    >>> print(bad.report(named=1))
    4 bad records passed over
      shift.jsonl line 2: var[1]: must be >= 0; got -1.0
      shift.jsonl lines 2-4, 9
    """

    def __init__(self, strict: bool = False) -> None:
        self.strict = strict
        self.count = 0
        self._first: list[str] = []
        self._lines: dict[str, list[int]] = {}
        self._kept = 0

    def __call__(self, error: InputError) -> None:
        """Take one in."""
        if self.strict:
            raise error
        self.count += 1
        if len(self._first) < 100:
            self._first.append(str(error))
        found = _LINE.match(error.place)
        if found and self._kept < _MOST_NUMBERS:
            self._lines.setdefault(f"{found[1]} {found[2]}", []).append(int(found[3]))
            self._kept += 1

    @property
    def first(self) -> list[str]:
        """The first error's text, if there is one."""
        return self._first[:1]

    def report(self, named: int = 10) -> str:
        """The count, the first `named` errors, and line by line which; empty where there was none."""
        if not self.count:
            return ""
        lines = [f"{self.count:,} bad record{'s' * (self.count != 1)} passed over"]
        lines += [f"  {' '.join(text.split())}" for text in self._first[:named]]
        if self.count > named:
            lines += [f"  {name}s {_ranges(numbers)}" for name, numbers in self._lines.items()]
            if self._kept < self.count:
                lines.append(f"  and {self.count - self._kept:,} more")
        return "\n".join(lines)


_LINE: Final = re.compile(r"(.*?) (line) (\d+)(?=:|$)")


def _ranges(numbers: list[int]) -> str:
    parts: list[list[int]] = []
    for n in numbers:
        if parts and n == parts[-1][1] + 1:
            parts[-1][1] = n
        else:
            parts.append([n, n])
    return ", ".join(str(a) if a == b else f"{a}-{b}" for a, b in parts)


def read_many(sources: Sequence[str | os.PathLike[str]], bad: BadLines) -> Iterator[tuple[str, BeliefTree]]:
    """(place, tree) of several sources, one after the other; `bad` takes in the bad records.

    Raises InputError where no source holds a valid record.
    """
    found = False
    for source in sources:
        for place, tree in read_trees(source, on_error=bad):
            found = True
            yield place, tree
    if not found:
        raise none_valid(sources, bad)


def none_valid(sources: Sequence[str | os.PathLike[str]], bad: BadLines) -> InputError:
    """The error of sources in which every record is bad."""
    names = ", ".join(str(s) for s in sources)
    return InputError(names, f"must hold at least one valid record; all {bad.count:,} are bad", *bad.first)


def write_trees(path: str | os.PathLike[str], trees: Iterable[BeliefTree]) -> int:
    """Write trees as JSON Lines, packed where the name ends in .gz; returns how many.

    Atomic, and the same trees give the same bytes. Numbers come back bit for bit.
    """
    name = str(path)
    if not name.endswith((".jsonl", ".jsonl.gz")):
        raise InputError(name, "must end in .jsonl or .jsonl.gz")
    lines = [json.dumps(to_record(tree), separators=(",", ":"), allow_nan=False) for tree in trees]
    data = "".join(line + "\n" for line in lines).encode()
    write_atomic(path, gzip.compress(data, mtime=0) if name.endswith(".gz") else data)
    return len(lines)


def _records(name: str) -> Iterator[tuple[str, bytes | InputError | object]]:
    if name == "-":
        yield from _lines(sys.stdin.buffer, "standard input", None)
        return
    if not name.endswith(_SUFFIXES):
        raise InputError(name, f"must end in {', '.join(_SUFFIXES)}, or be - for standard input")
    try:
        with Path(name).open("rb") as stream:
            if name.endswith(".json"):
                yield from _document(stream, name)
            else:
                packed_size = os.fstat(stream.fileno()).st_size if name.endswith(".gz") else None
                yield from _lines(stream, name, packed_size)
    except OSError as e:
        raise InputError(name, f"must be a readable file ({e.strerror or e})") from None


def _bounded(line: bytes) -> bytes | InputError:
    """The line, or why parsing it would take more memory than any record does."""
    if len(line) > min(_MOST_MARKS.values()):
        for mark, most in _MOST_MARKS.items():
            if line.count(mark) > most:
                return InputError("record", f"must not hold {mark.decode()!r} more than {most:,} times")
    return line


def _document(stream: BinaryIO, name: str) -> Iterator[tuple[str, bytes | InputError | object]]:
    data = stream.read(_MOST_LINE + 1)
    if len(data) > _MOST_LINE:
        raise InputError(name, f"must be at most {_MOST_LINE >> 20} MB; write long traces as .jsonl")
    if not data.strip():
        return
    bounded = _bounded(data)
    try:
        if isinstance(bounded, InputError):
            raise bounded
        obj: Any = parse_json(data)
    except InputError as e:
        yield name, e
        return
    if isinstance(obj, list):
        for i, item in enumerate(obj):
            yield f"{name} [{i}]", item
    else:
        yield name, obj


def _lines(
    raw: BinaryIO, name: str, packed_size: int | None
) -> Iterator[tuple[str, bytes | InputError | object]]:
    stream: Any = raw if packed_size is None else gzip.GzipFile(fileobj=raw)
    number, taken, blank = 0, 0, 0
    while True:
        number += 1
        place = f"{name} line {number}"
        try:
            line = stream.readline(_MOST_LINE + 1)
        except (EOFError, gzip.BadGzipFile, zlib.error) as e:
            yield place, InputError("gzip", f"must be whole ({e})")
            return
        if not line:
            return
        taken += len(line)
        if packed_size is not None and taken > _FREE + _MOST_RATIO * packed_size:
            yield (
                place,
                InputError("gzip", f"must not unpack to more than {_MOST_RATIO} times the file's size"),
            )
            return
        if len(line) > _MOST_LINE:
            yield place, InputError("record", f"must be at most {_MOST_LINE >> 20} MB long")
            return
        if line.strip():
            yield place, _bounded(line)
            continue
        blank += 1
        if blank > _MOST_BLANK:
            yield place, InputError("record", f"must not come after more than {_MOST_BLANK} blank lines")
            return
