"""Plots in a terminal: dots of braille, axes with values, a second series in rings where the first has no dots."""

from __future__ import annotations

import math
from collections.abc import Sequence

from vliwsim.faces.shell.lines import Line

DOTS = ((0x01, 0x08), (0x02, 0x10), (0x04, 0x20), (0x40, 0x80))
"""Bits of a braille cell by row and column."""
BLANK = 0x2800
HEIGHT = 12
"""Rows of a plot, axes not counted."""

Series = Sequence[float | None]


def plot(
    series: Series,
    other: Series | None,
    width: int,
    *,
    first: int,
    stretch: int,
    axis: str,
    legend: str,
    height: int = HEIGHT,
) -> list[Line]:
    """``series`` (None where undefined) over ``first`` … ``first + stretch``; ``other`` overlaid on the same axes."""
    every = [v for s in (series, other or ()) for v in s if v is not None and math.isfinite(v)]
    if not every:
        return [[("", "  nothing to draw: no element is defined")]]
    low, high = min(every), max(every)
    if low == high:
        low, high = (low - 1, high + 1) if low == 0 else (low - abs(low) / 2, high + abs(high) / 2)
    labels = [label(high), label((low + high) / 2), label(low)]
    margin = max(map(len, labels)) + 2
    columns = min(max(10, width - margin - 3), max(32, -(-len(series) // 2)))
    one = _canvas(series, columns, height, low, high)
    two = _canvas(other, columns, height, low, high) if other is not None else None
    zero = _row(0.0, height * 4, low, high) // 4 if low < 0 < high else None
    lines: list[Line] = [[("", f"  {legend}")]]
    for row in range(height):
        text = labels[0] if row == 0 else labels[1] if row == height // 2 else labels[2] if row == height - 1 else ""
        line: Line = [("faint", f"{text:>{margin}} │")]
        for column in range(columns):
            bits = one[row][column]
            if bits:
                line.append(("tint2", chr(BLANK + bits)))
            elif two is not None and two[row][column]:
                line.append(("tint0", "o"))
            else:
                line.append(("faint", "·" if row == zero and column % 4 == 0 else " "))
        lines.append(_merged(line))
    lines.append([("faint", " " * margin + " └" + "─" * columns)])
    left, right = str(first), str(first + stretch - 1)
    middle = axis.center(max(0, columns - len(left) - len(right)))
    lines.append([("faint", " " * (margin + 2) + left + middle + right)])
    return lines


def label(value: float) -> str:
    """A value of the axis."""
    return f"{value:.4g}" if abs(value) < 1e5 and value != int(value) else f"{value:.6g}"


def _row(value: float, rows: int, low: float, high: float) -> int:
    return min(rows - 1, max(0, round((high - value) / (high - low) * (rows - 1))))


def _canvas(series: Series | None, columns: int, height: int, low: float, high: float) -> list[list[int]]:
    """Braille bits: for each dot column a line from the lowest to the highest value that falls into it."""
    cells = [[0] * columns for _ in range(height)]
    values = list(series or ())
    across, rows = columns * 2, height * 4
    before: int | None = None
    for dot in range(across):
        a, b = dot * len(values) // across, max(dot * len(values) // across + 1, (dot + 1) * len(values) // across)
        here = [v for v in values[a:b] if v is not None and math.isfinite(v)]
        if not here:
            before = None
            continue
        top, bottom = _row(max(here), rows, low, high), _row(min(here), rows, low, high)
        last = _row(here[-1], rows, low, high)
        if before is not None:  # join it to the column before
            top, bottom = (min(top, before + 1), bottom) if before < top else (top, max(bottom, before - 1))
        for row in range(min(top, bottom), max(top, bottom) + 1):
            if 0 <= row < rows:
                cells[row // 4][dot // 2] |= DOTS[row % 4][dot % 2]
        before = last
    return cells


def _merged(line: Line) -> Line:
    """Neighbours of one style as one piece."""
    out: Line = []
    for style, text in line:
        if out and out[-1][0] == style:
            out[-1] = (style, out[-1][1] + text)
        else:
            out.append((style, text))
    return out
