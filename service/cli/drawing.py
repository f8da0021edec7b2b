"""Curves drawn with letters, for terminals and logs."""

from collections.abc import Sequence

WIDTH, HEIGHT = 64, 16
LETTERS = "abcdefgh"


def drawn(parameters: Sequence[float], curves: Sequence[Sequence[float]], top: float) -> list[str]:
    """
    Lines of text: one letter for each curve, `*` where curves meet, from 0 at the bottom to `top`.

    Args:
        parameters: Ascending; the axis runs over them evenly, one column or more for each.
        curves: Each of as many values as there are parameters.
        top: Above 0.
    """
    canvas = [[" "] * WIDTH for _ in range(HEIGHT)]
    for letter, curve in zip(LETTERS, curves, strict=False):
        for column in range(WIDTH):
            place = round(column * (len(parameters) - 1) / (WIDTH - 1))
            row = HEIGHT - 1 - round(min(curve[place] / top, 1.0) * (HEIGHT - 1))
            canvas[row][column] = letter if canvas[row][column] == " " else "*"
    lines = []
    for row, cells in enumerate(canvas):
        level = top * (HEIGHT - 1 - row) / (HEIGHT - 1)
        label = f"{level:8.4g}" if row % 3 == 0 or row == HEIGHT - 1 else " " * 8
        lines.append(f"{label} |{''.join(cells)}")
    ends = f"{parameters[0]:.10g}", f"{parameters[-1]:.10g}"
    lines.append(" " * 9 + "+" + "-" * WIDTH)
    lines.append(" " * 10 + ends[0] + " " * (WIDTH - len(ends[0]) - len(ends[1])) + ends[1])
    return lines
