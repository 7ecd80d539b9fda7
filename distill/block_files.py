"""Numbered files that grow by whole blocks, within caps on each and on all of them; floor 0, light."""

from __future__ import annotations

import contextlib
import os
import re
import tempfile
import time
from pathlib import Path
from typing import Final

__all__ = ["SUFFIX", "BlockFiles"]

SUFFIX: Final = ".jsonl.gz"
_STALE: Final = 3600.0  # seconds; no first block takes that long, so its writer is gone


class BlockFiles:
    """The files `NAME-000001.jsonl.gz`, `NAME-000002.jsonl.gz` ... of a folder, written by one thread.

    A file appears under its name together with its first block, so no reader meets an empty one, and
    numbers go on from the largest in the folder, so that processes may share it. Files that are there
    already are never written to, since their last block may be torn.

    most_file, most_total : bytes; the total counts every numbered file of that name in the folder, and
    may be overrun by one file for each further process that writes there.
    keep : "first" takes no more blocks once the total is reached, "last" deletes the lowest numbers.
    opened : files opened so far.

    >>> with tempfile.TemporaryDirectory() as folder:
    ...     files = BlockFiles(folder, "shift", most_file=10, most_total=30, keep="first")
    ...     [files.append(b"12345") for _ in range(7)]
    ...     files.close()
    ...     sorted(path.name for path in Path(folder).iterdir())
    [True, True, True, True, True, True, False]
    ['shift-000001.jsonl.gz', 'shift-000002.jsonl.gz', 'shift-000003.jsonl.gz']
    """

    def __init__(
        self, folder: str | os.PathLike[str], name: str, *, most_file: int, most_total: int, keep: str
    ) -> None:
        self.folder = Path(folder)
        self.name = name
        self.most_file = most_file
        self.most_total = most_total
        self.keep = keep
        self.opened = 0
        self._pattern = re.compile(re.escape(name) + r"-(\d{6,})" + re.escape(SUFFIX))
        self._descriptor: int | None = None
        self._path = Path()
        self._size = 0
        self._others = 0  # bytes of the other files, as last counted

    def append(self, block: bytes) -> bool:
        """Add a block and bring it to the disk; False where the caps leave no room for it.

        OSError passes through: then the block is taken back and the next one starts a file.
        """
        if len(block) > self.most_file:
            return False
        if self._descriptor is not None and self._has_to_rotate(len(block)):
            self.close()
        if self._descriptor is None:
            self._others = self._count()
        if self._others + self._size + len(block) > self.most_total and not self._make_room(len(block)):
            return False
        if self._descriptor is None:
            self._start(block)
        else:
            try:
                _write(self._descriptor, block)
            except BaseException:
                # What follows a torn block cannot be read, so it goes, and the file ends here.
                with contextlib.suppress(OSError):
                    os.ftruncate(self._descriptor, self._size)
                self.close()
                raise
            self._size += len(block)
        return True

    def close(self) -> None:
        """End the current file, if any; the next block starts another."""
        descriptor, self._descriptor, self._size = self._descriptor, None, 0
        if descriptor is not None:
            with contextlib.suppress(OSError):  # every block was brought to the disk before
                os.close(descriptor)

    def _has_to_rotate(self, more: int) -> bool:
        if self._size + more > self.most_file:
            return True
        assert self._descriptor is not None
        return os.fstat(self._descriptor).st_nlink == 0  # somebody deleted it

    def _numbered(self) -> list[tuple[int, Path]]:
        """The numbered files in the folder, lowest number first."""
        found = []
        with contextlib.suppress(FileNotFoundError):
            for path in self.folder.iterdir():
                match = self._pattern.fullmatch(path.name)
                if match:
                    found.append((int(match[1]), path))
        return sorted(found)

    def _count(self) -> int:
        """Bytes of the numbered files but the current one."""
        total = 0
        for _, path in self._numbered():
            if self._descriptor is None or path != self._path:
                with contextlib.suppress(FileNotFoundError):
                    total += path.stat().st_size
        return total

    def _make_room(self, more: int) -> bool:
        self._others = self._count()  # somebody may have collected files
        if self.keep == "last":
            for _, path in self._numbered():
                if self._others + self._size + more <= self.most_total:
                    break
                if self._descriptor is None or path != self._path:
                    with contextlib.suppress(FileNotFoundError):
                        size = path.stat().st_size
                        path.unlink()
                        self._others -= size
        return self._others + self._size + more <= self.most_total

    def _start(self, block: bytes) -> None:
        self.folder.mkdir(parents=True, exist_ok=True)
        self._sweep()
        descriptor, temporary = tempfile.mkstemp(dir=self.folder, prefix=f".{self.name}-", suffix=".part")
        try:
            os.chmod(temporary, 0o644)  # noqa: PTH101
            _write(descriptor, block)
            self._path = self._publish(Path(temporary))
        except BaseException:
            os.close(descriptor)
            raise
        finally:
            Path(temporary).unlink(missing_ok=True)
        self._descriptor, self._size = descriptor, len(block)
        self.opened += 1

    def _publish(self, temporary: Path) -> Path:
        """Give the file the next free number; two processes never get the same."""
        numbered = self._numbered()
        number = numbered[-1][0] + 1 if numbered else 1
        while True:
            path = self.folder / f"{self.name}-{number:06d}{SUFFIX}"
            try:
                os.link(temporary, path)
                return path
            except FileExistsError:
                number += 1
            except OSError:
                # A file system without hard links: a check and a move, which a second process may cross.
                if not path.exists():
                    temporary.replace(path)
                    return path
                number += 1

    def _sweep(self) -> None:
        """Remove first blocks whose writer was killed before they got a name."""
        for path in self.folder.glob(f".{self.name}-*.part"):
            with contextlib.suppress(OSError):
                if time.time() - path.stat().st_mtime > _STALE:
                    path.unlink()


def _write(descriptor: int, data: bytes) -> None:
    left = memoryview(data)
    while left:
        left = left[os.write(descriptor, left) :]
    os.fsync(descriptor)
