"""A small dot plot for a terminal: two by four dots in each character cell (Unicode braille)."""

from collections.abc import Sequence
from itertools import pairwise

_BRAILLE = 0x2800
_DOTS = ((0x01, 0x08), (0x02, 0x10), (0x04, 0x20), (0x40, 0x80))


class DotPlot:
    """``columns`` by ``rows`` character cells over ``x_low .. x_high`` and ``y_low .. y_high``.

    What lies outside is not drawn.
    """

    def __init__(self, columns: int, rows: int, x_range: tuple[float, float], y_range: tuple[float, float]) -> None:
        self._columns, self._rows = columns, rows
        self._x_low, self._x_high = x_range
        self._y_low, self._y_high = y_range
        self._cells = [[0] * columns for _ in range(rows)]

    def add_line(self, xs: Sequence[float], ys: Sequence[float]) -> None:
        """Join the points with straight lines."""
        points = [self._dot(x, y) for x, y in zip(xs, ys, strict=True)]
        for (x0, y0), (x1, y1) in pairwise(points):
            steps = max(abs(round(x1) - round(x0)), abs(round(y1) - round(y0)), 1)
            for k in range(steps + 1):
                self._set(round(x0 + (x1 - x0) * k / steps), round(y0 + (y1 - y0) * k / steps))

    def add_level(self, y: float) -> None:
        """A dotted horizontal line."""
        row = round(self._dot(self._x_low, y)[1])
        for column in range(0, 2 * self._columns, 4):
            self._set(column, row)

    def lines(self) -> list[str]:
        """The plot from top to bottom, each line ``columns`` characters wide."""
        return ["".join(chr(_BRAILLE | cell) for cell in row) for row in self._cells]

    def _dot(self, x: float, y: float) -> tuple[float, float]:
        across = (x - self._x_low) / (self._x_high - self._x_low) * (2 * self._columns - 1)
        down = (self._y_high - y) / (self._y_high - self._y_low) * (4 * self._rows - 1)
        return across, down

    def _set(self, x: int, y: int) -> None:
        if 0 <= x < 2 * self._columns and 0 <= y < 4 * self._rows:
            self._cells[y // 4][x // 2] |= _DOTS[y % 4][x % 2]
