"""Where the arm can grip, from above, with the picks by elbow and the misses by reason drawn on it."""

import numpy as np
from numpy.typing import NDArray

from pipeline.page.charts import WIDTH
from pipeline.page.glyphs import shape_of
from pipeline.page.head import words
from pipeline.page.markup import Markup, joined, tag
from pipeline.page.subject import Subject
from pipeline.reach_picks import PicksOnReach, picks_on_reach

FloatArray = NDArray[np.float64]

ELBOWS = ("right", "left")
ARROWS = ("M6 0L-4.5 -5.5V5.5Z", "M-6 0L4.5 -5.5V5.5Z")
GRIPPED = ("not at all", "right", "left", "either")  # by elbow: 1 right, 2 left, 3 both
MARGIN_MM = 25.0
TALLEST = 620.0
LETTER = 6.0  # about as wide as one is
SHADES = 4  # of the share of angles


def reach(subject: Subject) -> Markup:
    """The section's content."""
    over = picks_on_reach(subject.setting, subject.run)
    sheet = Sheet(subject, over)
    reasons = sorted(set(over.reasons))
    numbers = [subject.run.parts[k].number for k in over.missed.tolist()]
    misses = [sheet.mark(at, shape_of(reasons.index(reason)), "miss", f"part {number}, {words(reason)}")
              for number, at, reason in zip(numbers, over.missed_mm, over.reasons, strict=True)]
    picks = [sheet.mark(at, ARROWS[elbow], f"hit-{ELBOWS[elbow]}", f"pick {n}, elbow {ELBOWS[elbow]}")
             for n, (at, elbow) in enumerate(zip(over.picks_mm, over.elbows.tolist(), strict=True), 1)]
    told = f"The arm's reach from above, {len(over.picks_mm)} picks, {len(over.missed_mm)} parts that were missed"
    picture = tag("svg", tag("title", told), sheet.tiles(), sheet.surroundings(), *picks, *misses, class_="chart map",
                  viewBox=f"0 0 {WIDTH} {sheet.height:.0f}", role="img")  # fmt: skip
    note = ("Shaded where the arm can grip: darker, at more of the part's angles. Missed parts stand where they left "
            "the pick window." if subject.setting.cell.belt else
            "Shaded where the arm can grip: darker, at more of the part's angles. Missed parts stand where they lay.")
    return joined(tag("div", picture, class_="figure"), _key(over, reasons), tag("p", note, class_="note"))


class Sheet:
    """The cell from above, x to the right and y up, to scale: millimetres to places in the picture."""

    def __init__(self, subject: Subject, over: PicksOnReach) -> None:
        self.subject, self.over = subject, over
        arm, half = subject.setting.mover.arm, np.abs(_half_tile(over)).sum(axis=0)
        shown = [over.spots.tip_mm[:, :2] + half, over.spots.tip_mm[:, :2] - half, arm.base_mm[None, :2]]
        shown += [place.slots_mm[:, :2] for place in subject.setting.grasping.places.values()]
        shown += [np.array(keepout.polygon_mm) for keepout in subject.setting.cell.keepouts]
        points = np.vstack(shown)
        low, high = points.min(axis=0) - MARGIN_MM, points.max(axis=0) + MARGIN_MM
        self.scale = min(WIDTH / (high[0] - low[0]), TALLEST / (high[1] - low[1]))
        self.height = self.scale * (high[1] - low[1])
        aside = (WIDTH - self.scale * (high[0] - low[0])) / 2
        self.corner = np.array([aside - self.scale * low[0], self.scale * high[1]])

    def at(self, points_mm: FloatArray) -> FloatArray:
        """Places of points (n, 2)."""
        return np.asarray(self.corner + self.scale * np.asarray(points_mm) * [1.0, -1.0])

    def path(self, corners_mm: FloatArray) -> str:
        """A closed path through points (n, 2)."""
        return "M" + "L".join(f"{x:.1f} {y:.1f}" for x, y in self.at(corners_mm).tolist()) + "Z"

    def mark(self, at_mm: FloatArray, shape: str, look: str, told: str) -> Markup:
        """A mark at a point (2,), with words for those who point at it."""
        x, y = self.at(at_mm).tolist()
        return tag("path", tag("title", told), d=shape, transform=f"translate({x:.1f} {y:.1f}) scale(0.7)", class_=look)

    def tiles(self) -> Markup:
        """The map, tiles alike joined along each of its rows."""
        spots, half = self.over.spots, _half_tile(self.over)
        elbow = (spots.share[:, 0] > 0).astype(int) + 2 * (spots.share[:, 1] > 0)
        look = elbow * (SHADES + 1) + np.ceil(SHADES * spots.share[:, 2] - 1e-9).astype(int)
        paths: dict[int, list[str]] = {}
        for row in np.array_split(np.arange(len(spots)), self.over.rows):
            ends = np.append(np.flatnonzero(np.diff(look[row])), len(row) - 1)
            for first, last in zip(np.append(0, ends[:-1] + 1).tolist(), ends.tolist(), strict=True):
                a, b = spots.tip_mm[row[first], :2], spots.tip_mm[row[last], :2]
                (across, along) = half
                corners = np.array([a - across - along, a - across + along, b + across + along, b + across - along])
                paths.setdefault(int(look[row[first]]), []).append(self.path(corners))
        return joined(*(tag("path", d="".join(several), class_=f"tile-{GRIPPED[kind // (SHADES + 1)].split()[0]}",
                            fill_opacity=0.1 + 0.35 * (kind % (SHADES + 1)) / SHADES)
                        for kind, several in sorted(paths.items())))

    def surroundings(self) -> Markup:
        """The arm's base, places with their names, keep-outs."""
        setting = self.subject.setting
        x, y = self.at(setting.mover.arm.base_mm[:2]).tolist()
        drawn = [tag("path", tag("title", "base of the arm"), d=f"M{x - 8:.1f} {y:.1f}h16M{x:.1f} {y - 8:.1f}v16",
                     class_="base")]
        named: list[tuple[float, float, float]] = []
        for place in setting.grasping.places.values():
            slots = self.at(place.slots_mm[:400, :2])
            drawn.append(tag("path", d="".join(f"M{a - 3:.1f} {b - 3:.1f}h6v6h-6z" for a, b in slots.tolist()),
                             class_="slot"))  # fmt: skip
            x, y, half = float(slots[:, 0].mean()), float(slots[:, 1].min()) - 8, LETTER * len(place.name) / 2
            if any(abs(at - x) < wide + half and abs(height - y) < 12 for at, height, wide in named):
                y = float(slots[:, 1].max()) + 16
            named.append((x, y, half))
            drawn.append(tag("text", place.name, x=round(x, 1), y=round(y, 1), class_="middle"))
        drawn += [tag("path", tag("title", keepout.name or "keep-out"), d=self.path(np.array(keepout.polygon_mm)),
                      class_="keepout") for keepout in setting.cell.keepouts]  # fmt: skip
        return joined(*drawn)


def _half_tile(over: PicksOnReach) -> FloatArray:
    """Half a step across and half a step along the map (2, 2), mm."""
    points, columns = over.spots.tip_mm[:, :2], len(over.spots) // over.rows
    return np.array([points[1] - points[0], points[columns] - points[0]]) / 2


def _key(over: PicksOnReach, reasons: list[str]) -> Markup:
    """What the marks and shades mean, and how many there are."""
    def shown(*look: Markup) -> Markup:
        return tag("svg", *look, class_="glyph", viewBox="-7 -7 14 14", width=14, height=14, aria_hidden="true")

    told = []
    for k, elbow in enumerate(ELBOWS):
        told.append((shown(tag("path", d=ARROWS[k], class_=f"hit-{elbow}")),
                     f"{int(np.sum(over.elbows == k))} picked, elbow {elbow}"))
    told += [(shown(tag("path", d=shape_of(k), class_="miss")), f"{over.reasons.count(reason)} missed, {words(reason)}")
             for k, reason in enumerate(reasons)]
    right, left = over.spots.share[:, 0] > 0, over.spots.share[:, 1] > 0
    areas = (("either", right & left, "either elbow reaches"), ("right", right & ~left, "the right elbow alone"),
             ("left", left & ~right, "the left elbow alone"))
    told += [(shown(tag("rect", x=-6, y=-6, width=12, height=12, fill_opacity=0.45, class_=f"tile-{name}")), text)
             for name, there, text in areas if there.any()]
    return tag("p", *(tag("span", look, " ", text) for look, text in told), class_="legend note")
