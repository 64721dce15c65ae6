"""Charts as inline pictures that follow the page's colours, light, dark and on paper."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from pipeline.page.markup import Markup, joined, tag

FloatArray = NDArray[np.float64]
WIDTH, HEIGHT = 440, 190
LEFT, RIGHT, TOP, BOTTOM = 44, 14, 12, 22
STEPS = (1.0, 2.0, 2.5, 5.0)
DASHES = (None, "6 3", "2 3")


def ticks(low: float, high: float, most: int = 6) -> list[float]:
    """Round numbers from low to high, at most about `most` of them."""
    if not high > low:
        return [low]
    raw = (high - low) / most
    size = 10.0 ** np.floor(np.log10(raw))
    step = next((s * size for s in STEPS if s * size >= raw), 10 * size)
    first, last = int(np.ceil(low / step - 1e-9)), int(np.floor(high / step + 1e-9))
    return [round(k * float(step), 10) for k in range(first, last + 1)]


class Frame:
    """Axes of a chart: x and y in data units to places in the picture."""

    def __init__(self, x: tuple[float, float], y: tuple[float, float], height: int = HEIGHT) -> None:
        self.x_span, self.y_span, self.height = x, y, height

    def x(self, value: FloatArray | float) -> FloatArray:
        """Places of x values (n,), or of one."""
        low, high = self.x_span
        return np.asarray(LEFT + (np.asarray(value) - low) / ((high - low) or 1.0) * (WIDTH - LEFT - RIGHT))

    def y(self, value: FloatArray | float) -> FloatArray:
        """Places of y values (n,), or of one."""
        low, high = self.y_span
        rise = (np.asarray(value) - low) / ((high - low) or 1.0)
        return np.asarray(self.height - BOTTOM - rise * (self.height - TOP - BOTTOM))

    def axes(self, unit: str, y_label: str) -> Markup:
        """Grid lines with their numbers, the last one along x with its unit; above them what y is."""
        drawn = []
        for value in ticks(*self.y_span, most=4):
            y = round(float(self.y(value)), 1)
            drawn.append(tag("line", x1=LEFT, x2=WIDTH - RIGHT, y1=y, y2=y, class_="grid"))
            drawn.append(tag("text", f"{value:g}", x=LEFT - 6, y=y + 4, class_="end"))
        along = ticks(*self.x_span)
        for value in along:
            last, x = value == along[-1], round(float(self.x(value)), 1)
            drawn.append(tag("text", f"{value:g} {unit}" if last and unit else f"{value:g}", x=x,
                             y=self.height - BOTTOM + 15, class_="end" if x > WIDTH - 30 else "middle"))
        drawn.append(tag("text", y_label, x=0, y=8))
        return joined(*drawn)

    def line(self, x: FloatArray, y: FloatArray, style: int) -> Markup:
        """A line through points (n,)."""
        points = " ".join(f"{a:.1f},{b:.1f}" for a, b in zip(self.x(x).tolist(), self.y(y).tolist(), strict=True))
        return tag("polyline", points=points, class_=f"series series-{style}", stroke_dasharray=DASHES[style])

    def level(self, y: float, text: str, style: str = "level") -> Markup:
        """A level across the chart with its name."""
        at = round(float(self.y(y)), 1)
        return joined(tag("line", x1=LEFT, x2=WIDTH - RIGHT, y1=at, y2=at, class_=style),
                      tag("text", text, x=LEFT + 6, y=at - 4, class_="strong"))


def chart(told: str, *drawn: Markup, height: int = HEIGHT, stretched: bool = False) -> Markup:
    """A chart; told: what it shows, for those who do not see it."""
    return tag("svg", tag("title", told), *drawn, class_="chart", viewBox=f"0 0 {WIDTH} {height}", role="img",
               preserveAspectRatio="none" if stretched else None)


def key(names: Sequence[str]) -> Markup:
    """Names of a chart's lines, each with its look."""
    shown = [tag("span", tag("svg", tag("line", x1=0, x2=26, y1=5, y2=5, class_=f"series series-{k}",
                                        stroke_dasharray=DASHES[k]), viewBox="0 0 26 10", width=26, height=10,
                             aria_hidden="true"), " ", name) for k, name in enumerate(names)]  # fmt: skip
    return tag("p", *shown, class_="legend note")


def stacked(parts: Sequence[tuple[str, float, str]], told: str) -> Markup:
    """One bar made of named amounts; each is (name, amount, class)."""
    total = sum(amount for _, amount, _ in parts) or 1.0
    drawn, at = [], 0.0
    for name, amount, style in parts:
        wide = amount / total * WIDTH
        drawn.append(tag("rect", tag("title", f"{name}: {amount:.3f}"), x=round(at, 2), y=0,
                         width=round(max(wide - 1, 0), 2), height=26, class_=f"fill-{style}"))  # fmt: skip
        at += wide
    return chart(told, *drawn, height=26, stretched=True)
