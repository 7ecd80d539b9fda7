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


def test_a_loss_of_zero_has_a_row_of_its_own_and_unknown_ones_are_left_out(
    capsys: pytest.CaptureFixture[str],
) -> None:
    scatter([*POINTS, (50.0, 0.0, "perfect", True), (20.0, None, "unknown", False)], "time", "loss")
    text = capsys.readouterr().out
    assert "unknown" not in text
    *axis, zero = [line for line in text.splitlines() if "|" in line]
    assert zero.split("|")[0].strip() == "0"
    assert zero.split("|")[1].strip() == "b"
    assert float(axis[-1].split("|")[0]) == pytest.approx(0.05 / 1.3, rel=0.01)
    assert "d" in axis[-1] + axis[-2]  # the smallest loss above 0, near the axis' end
    scatter([(1.0, 0.0, "perfect", False)], "time", "loss", height=4)
    labels = [line.split("|")[0].strip() for line in capsys.readouterr().out.splitlines() if "|" in line]
    assert labels == ["", "", "", "0"]
    scatter([(1.0, None, "unknown", False)], "time", "loss")
    assert "no point has a loss" in capsys.readouterr().out


def test_points_in_one_place_are_one_mark_where_they_belong(capsys: pytest.CaptureFixture[str]) -> None:
    twins = [(10.0, 1.0, f"twin {i}", False) for i in range(3)]
    scatter([*twins, (1000.0, 0.01, "other", True)], "time", "loss", width=30, height=5)
    text = capsys.readouterr().out
    marked = [row for row in grid(text) if "*" in row]
    scatter([twins[0], (1000.0, 0.01, "other", True)], "time", "loss", width=30, height=5)
    alone = [row for row in grid(capsys.readouterr().out) if "a" in row]
    assert marked[0].index("*") == alone[0].index("a")
    assert len(marked) == 1
    assert "  *  in one place: a, b, c" in text.splitlines()
