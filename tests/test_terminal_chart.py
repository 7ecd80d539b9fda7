"""The scatter in the terminal: every point once, where it belongs, zeros on the lowest row."""

from __future__ import annotations

import pytest

from distill.terminal_chart import scatter

POINTS = [(10.0, 5.0, "fast", True), (1000.0, 0.05, "slow", True), (100.0, 0.5, "middle", False)]


def grid(text: str) -> list[str]:
    """The rows between the axes."""
    return [line.split("|", 1)[1] for line in text.splitlines() if "|" in line]


def test_points_stand_in_order_of_both_axes(capsys: pytest.CaptureFixture[str]) -> None:
    scatter(POINTS, "time", "loss", width=40, height=9)
    text = capsys.readouterr().out
    where = {c: (r, row.index(c)) for r, row in enumerate(grid(text)) for c in "abc" if c in row}
    assert len(where) == 3
    # a, b, c are in order of time: fast, middle, slow; smaller losses stand lower.
    assert [where[c][0] for c in "abc"] == sorted(where[c][0] for c in "abc")
    assert [where[c][1] for c in "abc"] == sorted(where[c][1] for c in "abc")
    # Logarithmic: the one between stands halfway.
    assert abs(2 * where["b"][1] - where["a"][1] - where["c"][1]) <= 1
    assert "time" in text
    assert "loss" in text
    legend = [line for line in text.splitlines() if line.startswith(("  a ", "  b "))]
    assert "fast" in legend[0]
    assert "on the front" in legend[0]
    assert "on the front" not in legend[1]


def test_a_loss_of_zero_stands_on_the_lowest_row_and_unknown_ones_are_left_out(
    capsys: pytest.CaptureFixture[str],
) -> None:
    scatter([*POINTS, (50.0, 0.0, "perfect", True), (20.0, None, "unknown", False)], "time", "loss")
    text = capsys.readouterr().out
    assert "unknown" not in text
    assert "b" in grid(text)[-1]
    scatter([(1.0, None, "unknown", False)], "time", "loss")
    assert "no point has a loss" in capsys.readouterr().out


def test_points_in_one_place_stand_side_by_side(capsys: pytest.CaptureFixture[str]) -> None:
    scatter([(10.0, 1.0, f"twin {i}", False) for i in range(3)], "time", "loss", width=30, height=5)
    assert any("abc" in row for row in grid(capsys.readouterr().out))
