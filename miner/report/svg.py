"""A drawing area with two axes, as the text of an SVG image. Colours come from the page's style."""

from __future__ import annotations

import math
from collections.abc import Sequence

from markupsafe import Markup, escape

WIDTH = 340


def _at(x: float) -> str:
    return f"{x:.1f}".removesuffix(".0")


class Plot:
    """Draws into a frame of ``width`` x ``height`` units; data run over ``x`` and ``y``."""

    def __init__(
        self,
        x: tuple[float, float],
        y: tuple[float, float],
        *,
        width: int = WIDTH,
        height: int = 170,
        margin: tuple[int, int, int, int] = (8, 8, 20, 38),
    ) -> None:
        self.width, self.height = width, height
        self.top, self.right, self.bottom, self.left = margin
        self._x, self._y = x, y
        self._parts: list[str] = []

    def px(self, x: float) -> float:
        """Data to units from the left."""
        low, high = self._x
        return self.left + (x - low) / ((high - low) or 1) * (self.width - self.left - self.right)

    def py(self, y: float) -> float:
        """Data to units from the top."""
        low, high = self._y
        room = self.height - self.top - self.bottom
        return self.height - self.bottom - (y - low) / ((high - low) or 1) * room

    def line(self, points: Sequence[tuple[float, float | None]], kind: str) -> None:
        """A line through data points, broken where y is None."""
        path, pen = [], "M"
        for x, y in points:
            if y is None:
                pen = "M"
                continue
            path.append(f"{pen}{_at(self.px(x))} {_at(self.py(y))}")
            pen = "L"
        if path:
            self._parts.append(f'<path class="{kind}" d="{"".join(path)}"/>')

    def area(self, outline: Sequence[tuple[float, float]], kind: str) -> None:
        """A filled outline."""
        if outline:
            points = "L".join(f"{_at(self.px(x))} {_at(self.py(y))}" for x, y in outline)
            self._parts.append(f'<path class="{kind}" d="M{points}Z"/>')

    def box(self, x: tuple[float, float], y: tuple[float, float], kind: str) -> None:
        """A rectangle between data values."""
        left, right = self.px(x[0]), self.px(x[1])
        top, bottom = self.py(y[1]), self.py(y[0])
        self._parts.append(
            f'<rect class="{kind}" x="{_at(left)}" y="{_at(top)}" width="{_at(right - left)}" '
            f'height="{_at(bottom - top)}"/>'
        )

    def dot(self, x: float, y: float, kind: str, radius: float = 3) -> None:
        """A disc."""
        self._parts.append(
            f'<circle class="{kind}" cx="{_at(self.px(x))}" cy="{_at(self.py(y))}" '
            f'r="{_at(radius)}"/>'
        )

    def upright(self, x: float, kind: str, y: tuple[float, float] | None = None) -> None:
        """A line up from the x axis."""
        low, high = y or self._y
        self.line([(x, low), (x, high)], kind)

    def text(self, x: float, y: float, words: str, anchor: str = "middle", kind: str = "t") -> None:
        """Words at a place in units."""
        self._parts.append(
            f'<text class="{kind}" x="{_at(x)}" y="{_at(y)}" text-anchor="{anchor}">'
            f"{escape(words)}</text>"
        )

    def x_axis(self, ticks: Sequence[tuple[float, str]]) -> None:
        """The line below, with words under its ticks."""
        foot = self.height - self.bottom
        self._parts.append(
            f'<path class="axis" d="M{self.left} {foot}H{self.width - self.right}"/>'
        )
        for x, words in ticks:
            at, half = self.px(x), 3.3 * len(words)  # about half of what the words take
            anchor = "start" if at < half else "end" if at > self.width - half else "middle"
            self.text(at, foot + 13, words, anchor)

    def y_axis(self, ticks: Sequence[tuple[float, str]]) -> None:
        """Faint lines across, with words at their left."""
        for y, words in ticks:
            at = _at(self.py(y))
            self._parts.append(
                f'<path class="grid" d="M{self.left} {at}H{self.width - self.right}"/>'
            )
            self.text(self.left - 4, self.py(y) + 4, words, "end")

    def done(self, label: str, kind: str = "chart") -> Markup:
        """The image, with its description for who cannot see it."""
        return Markup(
            f'<svg class="{kind}" role="img" viewBox="0 0 {self.width} {self.height}" '
            f'aria-label="{escape(label)}">{"".join(self._parts)}</svg>'
        )


def ticks(high: float, most: int = 4) -> list[float]:
    """Round values from 0 up to ``high``, at most ``most`` steps."""
    if not high > 0:
        return [0.0]
    raw = high / most
    power = 10.0 ** math.floor(math.log10(raw))
    step = next(power * m for m in (1, 2, 5, 10) if power * m >= raw * (1 - 1e-9))
    return [i * step for i in range(int(high / step + 1e-9) + 1)]
