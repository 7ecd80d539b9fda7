"""A scatter of named points, drawn in the terminal on logarithmic axes; floor 0."""

from __future__ import annotations

import math
from collections.abc import Sequence

from rich.console import Console
from rich.text import Text

__all__ = ["scatter"]

Point = tuple[float, float | None, str, bool]  # x, y, name, whether it stands on the front


def scatter(
    points: Sequence[Point], x_label: str, y_label: str, *, width: int = 64, height: int = 16
) -> None:
    """Print the points: letters on a grid, those on the front bold and joined in the legend by a mark.

    A logarithmic axis has no 0: a y of 0 stands on the lowest row. Points without y are left out.
    """
    shown = sorted((p for p in points if p[1] is not None), key=lambda p: p[0])
    console = Console(highlight=False)
    if not shown:
        console.print(f"no point has a {y_label}")
        return
    positive = [p[1] for p in shown if p[1]] or [1.0]
    xs, ys = _axis([p[0] for p in shown]), _axis(positive)
    grid: list[list[tuple[str, str]]] = [[(" ", "")] * width for _ in range(height)]
    for letter, (x, y, _, front) in zip(_letters(len(shown)), shown, strict=True):
        row = height - 1 if not y else height - 1 - _cell(y, ys, height)
        column = _cell(x, xs, width)
        while grid[row][column][0] != " " and column + 1 < width:
            column += 1
        grid[row][column] = (letter, "bold green" if front else "dim")
    edge = max(len(f"{v:.3g}") for v in ys)
    console.print(f"{'':{edge}}  {y_label}")
    for i, cells in enumerate(grid):
        mark = f"{ys[1]:.3g}" if i == 0 else f"{ys[0]:.3g}" if i == height - 1 else ""
        line = Text(f"{mark:>{edge}} |")
        for character, style in cells:
            line.append(character, style)
        console.print(line, no_wrap=True)
    low, high = f"{xs[0]:.3g}", f"{xs[1]:.3g}"
    console.print(f"{'':{edge}} +{'-' * width}")
    console.print(f"{'':{edge}}  {low}{x_label:^{width - len(low) - len(high)}}{high}")
    for letter, (x, y, name, front) in zip(_letters(len(shown)), shown, strict=True):
        where = "on the front" if front else ""
        console.print(f"  {letter}  {name:<20} {x:9.1f} {y:9.4f}  {where}")


def _letters(n: int) -> list[str]:
    """One character a point."""
    alphabet = "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ"
    return [alphabet[i] if i < len(alphabet) else "*" for i in range(n)]


def _axis(values: Sequence[float]) -> tuple[float, float]:
    """Ends of a logarithmic axis around the values."""
    low, high = min(values), max(values)
    return (low / 1.3, high * 1.3) if low > 0 else (1.0, 2.0)


def _cell(value: float, ends: tuple[float, float], cells: int) -> int:
    share = math.log(value / ends[0]) / math.log(ends[1] / ends[0])
    return min(cells - 1, max(0, int(share * cells)))
