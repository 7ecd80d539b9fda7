"""A scatter of named points, drawn in the terminal on logarithmic axes; floor 0."""

from __future__ import annotations

import math
from collections.abc import Sequence

from rich.console import Console
from rich.text import Text

__all__ = ["scatter"]

Point = tuple[float, float | None, str, bool]  # x, y, name, whether it stands on the front
_SEVERAL = "*"


def scatter(
    points: Sequence[Point], x_label: str, y_label: str, *, width: int = 64, height: int = 16
) -> None:
    """Print the points: letters on a grid, those on the front bold and told as such in the legend.

    A logarithmic axis has no 0: points whose y is 0 have a row of their own below it. Points that share a
    cell are one `*`, and a line says which. Points without y are left out.
    """
    shown = sorted((p for p in points if p[1] is not None), key=lambda p: p[0])
    console = Console(highlight=False)
    if not shown:
        console.print(f"no point has a {y_label}")
        return
    positive = [p[1] for p in shown if p[1]]
    xs, ys = _axis([p[0] for p in shown]), _axis(positive or [1.0])
    rows = height - (len(positive) < len(shown))  # of the axis
    cells: dict[tuple[int, int], list[int]] = {}
    for i, (x, y, *_) in enumerate(shown):
        row = rows - 1 - _cell(y, ys, rows) if y else rows
        cells.setdefault((row, _cell(x, xs, width)), []).append(i)
    letters = _letters(len(shown))
    marks = {0: f"{ys[1]:.3g}", rows - 1: f"{ys[0]:.3g}", rows: "0"}
    if not positive:
        marks = {rows: "0"}
    edge = max(map(len, marks.values()))
    console.print(f"{'':{edge}}  {y_label}")
    for row in range(height):
        line = Text(f"{marks.get(row, ''):>{edge}} |")
        for column in range(width):
            here = cells.get((row, column), [])
            character = " " if not here else letters[here[0]] if len(here) == 1 else _SEVERAL
            front = any(shown[i][3] for i in here)
            line.append(character, "" if not here else "bold green" if front else "dim")
        console.print(line, no_wrap=True)
    low, high = f"{xs[0]:.3g}", f"{xs[1]:.3g}"
    console.print(f"{'':{edge}} +{'-' * width}")
    console.print(f"{'':{edge}}  {low}{x_label:^{width - len(low) - len(high)}}{high}")
    for letter, (x, y, name, front) in zip(letters, shown, strict=True):
        where = "on the front" if front else ""
        console.print(f"  {letter}  {name:<20} {x:9.1f} {y:9.4f}  {where}")
    for together in cells.values():
        if len(together) > 1:
            console.print(f"  {_SEVERAL}  in one place: {', '.join(letters[i] for i in together)}")


def _letters(n: int) -> list[str]:
    """One character a point, + for those beyond the alphabet."""
    alphabet = "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ"
    return [alphabet[i] if i < len(alphabet) else "+" for i in range(n)]


def _axis(values: Sequence[float]) -> tuple[float, float]:
    """Ends of a logarithmic axis around the values."""
    low, high = min(values), max(values)
    return (low / 1.3, high * 1.3) if low > 0 else (1.0, 2.0)


def _cell(value: float, ends: tuple[float, float], cells: int) -> int:
    share = math.log(value / ends[0]) / math.log(ends[1] / ends[0])
    return min(cells - 1, max(0, int(share * cells)))
