"""Finding: image to sightings. Patches, placements on them, poses fitted to sub-pixel, the best of them kept.

A finder of one's own needs `find` alone; see `Finder`.
"""

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any, Protocol

import cv2
import numpy as np
from numpy.typing import NDArray

from cameras.blobs import Blobs, blobs_of
from cameras.edges import CELL_PX, EdgeMap, edge_map
from cameras.match import Fit, Template, fit_pose, template_of
from cameras.model import Model
from cameras.resized import Resized, resized
from cameras.rivals import best
from cameras.search import TURN_STEP_RAD, coarse_points, peaks, placements, room_for
from cameras.sightings import Sightings
from cameras.view import CameraMap, Views, unproject, views_of

FloatArray = NDArray[np.float64]
Grey = NDArray[np.uint8]

DEFAULT_SCORE = 0.7
MOST_PEAKS = 40
DEPTH_SHARE, DEPTH_SLACK = 0.7, 2.0  # of a part's depth, what the patch under its middle has at the least; cells less
SLACK_CELLS, BEYOND_CELLS = 3, 24
TRIED_ON_ONE, TRIED_ON_MORE, CELLS_A_MM2 = 6, 5, 0.5
LEAST_INNER, LEAST_INNER_TOLD = 0.4, 0.3  # share of inner edges without which nothing says that a part lies the right
# side up; and where the outline tells as well
FLAT_DOWN = -0.05  # the underside's edges are not quite those that were taught
ROUND_DOWN, ROUND_UP = 0.22, 0.725  # circles are met by chance: how much more must be found of one where nothing else
# is known, and the least mean share of circle and inner edges
LEAST_ROUGH = 0.6  # score of a rough placement worth fitting
PROMISING = 0.45
SETTLED = 0.92
NEARLY_ROUND, WORTH_TURNING, WELL_TURNED, TURNED_RAD = 0.15, 0.55, 0.85, 0.2  # spread of radii; shares; a turned start
STEP_SHARE, STEP_NOISE = 0.12, 2.5  # of the edge map's threshold and noise: the least step the fit takes for an edge
UNKNOWN_SHARE = 0.25
UNKNOWN_LEAST_MM2 = 25.0
RIM_WEAKEST, RIM_USUAL = 1.6, 1.85  # thresholds of the edge map, at the rim of a thing


class Finder(Protocol):
    """What finds parts. Bring your own: a class with this method, given where `PartFinder` is."""

    def find(self, image: NDArray[np.uint8], camera: CameraMap) -> Sightings:
        """Sightings of one image (rows, columns) or (rows, columns, 3), in the cell frame; `row` is the caller's."""
        ...


@dataclass(frozen=True)
class TaughtPart:
    """A kind of part to look for. turns: how many yaws look alike, 0 for all (the cell's word, not the model's)."""

    name: str
    model: Model
    height_mm: float
    turns: int


@dataclass(frozen=True)
class _Kind:
    name: str
    down: bool
    template: Template
    coarse: FloatArray
    anchor: FloatArray
    depth_mm: float
    model: Model
    first_rad: float
    steps: int
    step_rad: float
    nearly_round: bool


@dataclass(frozen=True)
class _Placed:
    kind: _Kind
    fit: Fit
    xy_mm: FloatArray
    polygon_px: FloatArray
    cut: bool

    def explains(self, u: float, v: float, yaw: float, kind: _Kind, affine: FloatArray) -> bool:
        """Whether a rough placement (grip point in cells) lies inside this fit, which is too good to be bettered."""
        if self.fit.worth < SETTLED or (self.kind.name == kind.name and self.kind.model.mirrored_alike
                                                and self.kind.down != kind.down):  # fmt: skip
            return False
        cosine, sine = np.cos(yaw), np.sin(yaw)
        x, y = kind.anchor
        at = affine @ np.array([cosine * x - sine * y, sine * x + cosine * y]) + [u, v]
        pixel = (float(CELL_PX * at[0] + 1.5), float(CELL_PX * at[1] + 1.5))
        return cv2.pointPolygonTest(self.polygon_px.astype(np.float32), pixel, measureDist=False) >= 0


class PartFinder:
    """Finds taught parts, both sides up, and what is none of them, on a surface at a known height.

    least_score: share of the expected outline that must be found. One finder serves one camera; frames come in any
    order, and nothing is kept from one to the next.
    """

    def __init__(self, parts: Iterable[TaughtPart], surface_mm: float, least_score: float = DEFAULT_SCORE) -> None:
        self.parts, self.surface_mm, self.least_score = tuple(parts), surface_mm, least_score
        self.kinds = [_kind(part, down) for part in self.parts for down in (False, True)
                      if part.model.side_told or not down]
        areas = [cv2.contourArea(part.model.outline_mm.astype(np.float32)) for part in self.parts]
        self.smallest_mm2 = min(areas, default=100.0)
        self.highest_mm = max((part.height_mm for part in self.parts), default=10.0)
        self._views: tuple[Views, Resized] | None = None
        self._camera: CameraMap | None = None
        self._shape = (0, 0)

    def find(self, image: NDArray[np.uint8], camera: CameraMap) -> Sightings:
        """Sightings in one image; things cut by its border are left out."""
        grey = grey_of(image)
        if grey.shape[0] < 32 or grey.shape[1] < 32:
            return Sightings.joined(())
        views, seen_by = self._views_for(camera, grey.shape)
        if not len(views.places_mm):
            return Sightings.joined(())
        grey = seen_by.seen(grey)
        edges = edge_map(grey)
        blobs = blobs_of(edges)
        placed: list[_Placed] = []
        for patch, place in enumerate(_places(seen_by, views, blobs)):
            placed += self._on_patch(grey, views, edges, blobs, patch, place)
        kept = [placed[k] for k in best(blobs, [(one.fit.worth, one.polygon_px) for one in placed])]
        return _sightings([one for one in kept if not one.cut], self._unknown(kept, edges, blobs, seen_by))

    def _views_for(self, camera: CameraMap, shape: tuple[int, int]) -> tuple[Views, Resized]:
        if self._views is None or self._camera is not camera or self._shape != shape:
            seen_by = resized(camera, self.surface_mm, shape, self.smallest_mm2)
            self._views = views_of(seen_by, self.surface_mm, self.highest_mm, seen_by.shape), seen_by
            self._camera, self._shape = camera, shape
        return self._views

    def _on_patch(
        self, grey: Grey, views: Views, edges: EdgeMap, blobs: Blobs, patch: int, place: int
    ) -> list[_Placed]:
        """Fits on one patch: from the best rough placement down, none where a good fit already stands."""
        affine = np.ascontiguousarray(views.coefficients[place][:, 1:3]) / CELL_PX
        least = max(STEP_SHARE * edges.least, STEP_NOISE * edges.noise)
        rough = self._rough(edges, blobs, patch, affine)
        most = TRIED_ON_ONE + TRIED_ON_MORE * int(blobs.cells[patch] / (CELLS_A_MM2 * self.smallest_mm2))
        placed: list[_Placed] = []
        tried = 0
        for score, u, v, yaw, _, number in rough:
            if tried >= most or score < LEAST_ROUGH:
                break
            kind = self.kinds[int(number)]
            if any(one.explains(u, v, yaw, kind, affine) for one in placed):
                continue
            tried += 1
            at_px = CELL_PX * np.array([u, v]) + 0.5 * (CELL_PX - 1)
            one = self._fitted(grey, views, kind, at_px, yaw, place, least)
            if one is not None:
                placed.append(one)
        return placed

    def _rough(self, edges: EdgeMap, blobs: Blobs, patch: int, affine: FloatArray) -> FloatArray:
        """Rough placements (n, 6), best first: score, column, row, yaw, how many alike, number of the kind."""
        bounds, scale = self._bounds(blobs, patch), float(np.sqrt(abs(np.linalg.det(affine))))
        every = []
        for number, kind in enumerate(self.kinds):
            room, depth = room_for(bounds, kind.steps), kind.depth_mm * scale
            deep = min(DEPTH_SHARE * depth, depth - DEPTH_SLACK)
            placements(edges.own, edges.near, blobs.label, blobs.depth, patch + 1, kind.coarse, affine, kind.anchor,
                       deep, kind.first_rad, kind.steps, kind.step_rad, bounds, room)  # fmt: skip
            found = peaks(room)[:MOST_PEAKS]
            every.append(np.column_stack([found, np.full(len(found), float(number))]))
        rough = np.concatenate(every)
        return np.asarray(rough[np.argsort(-rough[:, 0], kind="stable")])

    def _fitted(
        self, grey: Grey, views: Views, kind: _Kind, at_px: FloatArray, yaw: float, place: int, least: float
    ) -> _Placed | None:
        start, middle = np.empty(2), float(np.mean(kind.template.heights[:2]))
        for _ in range(2):  # the second time from the place that is nearest to the part itself
            unproject(views.coefficients[place], at_px[0], at_px[1], middle, start)
            place = int(views.nearest((views.places_mm[place] + start)[None])[0])
        unproject(views.coefficients[place], at_px[0], at_px[1], middle, start)
        fit = self._turned_fit(grey, views.coefficients[place], kind, start, yaw, least)
        least_share = self.least_score + (0.0 if not kind.down else ROUND_DOWN if kind.template.round else FLAT_DOWN)
        if fit is None or fit.share < least_share:
            return None
        least_inner = LEAST_INNER if kind.model.mirrored_alike else LEAST_INNER_TOLD
        if not kind.down and fit.inner_share < least_inner:
            return None
        if kind.template.round and not kind.down and 0.5 * (fit.share + fit.inner_share) < ROUND_UP:
            return None
        rows, columns = grey.shape
        low, high = fit.polygon_px.min(axis=0), fit.polygon_px.max(axis=0)
        cut = bool(low.min() < 0.5 or high[0] > columns - 1.5 or high[1] > rows - 1.5)
        return _Placed(kind, fit, views.places_mm[place] + fit.pose[:2] - kind.model.shift_mm, fit.polygon_px, cut)

    def _turned_fit(
        self, grey: Grey, view: FloatArray, kind: _Kind, start: FloatArray, yaw: float, least: float
    ) -> Fit | None:
        """The fit from a start; where it is no good one, the best of it and of starts turned by a little more."""
        at = (float(start[0]), float(start[1]))
        fit = fit_pose(grey, view, kind.template, (*at, yaw), least, PROMISING)
        if fit is None or not kind.nearly_round or not WORTH_TURNING < fit.share < WELL_TURNED:
            return fit
        turn = min(TURNED_RAD, 0.25 * kind.steps * kind.step_rad)
        others = (fit_pose(grey, view, kind.template, (*at, yaw + way * turn), least, PROMISING) for way in (-1.0, 1.0))
        return max([fit, *(one for one in others if one is not None)], key=lambda one: one.worth)

    def _bounds(self, blobs: Blobs, patch: int) -> NDArray[np.int64]:
        """How far placements on a patch may reach, in cells: a little beyond it, and beyond a border that cuts it."""
        rows, columns = blobs.label.shape
        box = blobs.box[patch]
        at_border = np.array([box[0] <= 1, box[1] <= 1, box[2] >= columns - 2, box[3] >= rows - 2])
        further = np.where(at_border, BEYOND_CELLS, SLACK_CELLS) * np.array([-1, -1, 1, 1])
        return np.asarray(box + further, dtype=np.int64)

    def _unknown(
        self, kept: list[_Placed], edges: EdgeMap, blobs: Blobs, camera: CameraMap
    ) -> list[tuple[FloatArray, FloatArray]]:
        """Centre and outline about it, in mm, of what no part explains and no border cuts."""
        left: NDArray[Any] = (blobs.label > 0).astype(np.uint8)
        for one in kept:
            polygon = np.round((one.polygon_px - 1.5) / CELL_PX).astype(np.int32)
            cv2.fillPoly(left, [polygon], 0)
            cv2.polylines(left, [polygon], True, 0, 5)
        left = cv2.morphologyEx(left, cv2.MORPH_OPEN, np.ones((3, 3), np.uint8))
        found = []
        for patch in range(len(blobs.box)):
            if blobs.cut[patch]:
                continue
            x0, y0, x1, y1 = blobs.box[patch]
            own = ((left > 0) & (blobs.label == patch + 1))[y0 : y1 + 1, x0 : x1 + 1].astype(np.uint8)
            if own.sum() < UNKNOWN_SHARE * blobs.cells[patch]:
                continue
            outlines, _ = cv2.findContours(own, cv2.RETR_EXTERNAL, cv2.CHAIN_APPROX_SIMPLE)
            outline = np.asarray(max(outlines, key=cv2.contourArea)[:, 0], dtype=np.int64) + np.array([x0, y0])
            if not _has_rim(outline, edges):
                continue
            shape = camera.to_cell(outline * CELL_PX + 0.5 * (CELL_PX - 1), self.surface_mm)
            if len(shape) >= 3 and cv2.contourArea(shape.astype(np.float32)) >= UNKNOWN_LEAST_MM2:
                centre = 0.5 * (shape.min(axis=0) + shape.max(axis=0))
                found.append((centre, shape - centre))
        return found


def grey_of(image: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """An image (rows, columns) or (rows, columns, 3) as contiguous grey levels."""
    grey = cv2.cvtColor(image, cv2.COLOR_BGR2GRAY) if image.ndim == 3 else image
    return np.ascontiguousarray(grey, dtype=np.uint8)


def _places(camera: CameraMap, views: Views, blobs: Blobs) -> list[int]:
    """The place of the view nearest to each patch."""
    middles = 0.5 * CELL_PX * np.asarray(blobs.box[:, :2] + blobs.box[:, 2:], float) + 0.5 * (CELL_PX - 1)
    return [int(place) for place in views.nearest(camera.to_cell(middles, views.surface_mm))]


def _kind(part: TaughtPart, down: bool) -> _Kind:
    template = template_of(part.model, down)
    period = 2.0 * np.pi / max(part.turns, 1)
    steps = 1 if part.turns == 0 else max(round(period / TURN_STEP_RAD), 1)
    return _Kind(part.name, down, template, coarse_points(template.points), *_deepest(template.outline), part.model,
                 part.model.yaw_rad if part.turns == 0 else 0.0, steps, period / steps,
                 steps > 1 and _spread(template.outline) < NEARLY_ROUND)  # fmt: skip


def _spread(outline: FloatArray) -> float:
    """Standard deviation of a polygon's distances from its middle, as a share of their mean."""
    radius = np.linalg.norm(outline - outline.mean(axis=0), axis=1)
    return float(radius.std() / radius.mean())


def _deepest(outline: FloatArray) -> tuple[FloatArray, float]:
    """The point (2,) deepest inside a polygon, and how deep it lies."""
    low = outline.min(axis=0)
    scale = 120.0 / max(float(np.ptp(outline, axis=0).max()), 1e-6)
    mask = np.zeros((130, 130), np.uint8)
    cv2.fillPoly(mask, [np.round((outline - low) * scale + 4).astype(np.int32)], 1)
    depth = cv2.distanceTransform(mask, cv2.DIST_L2, 5)
    v, u = np.unravel_index(int(np.argmax(depth)), depth.shape)
    return np.asarray((np.array([u, v], float) - 4) / scale + low), float(depth[v, u]) / scale


def _has_rim(outline: NDArray[np.int64], edges: EdgeMap) -> bool:
    """Whether an outline (k, 2) in cells is all along a much stronger edge than a scuffed belt has."""
    wide = cv2.dilate(edges.strength, np.ones((3, 3), np.uint8))
    rim = wide[outline[:, 1], outline[:, 0]] / edges.least
    return bool(np.percentile(rim, 25) >= RIM_WEAKEST and np.median(rim) >= RIM_USUAL)


def _sightings(kept: list[_Placed], unknown: list[tuple[FloatArray, FloatArray]]) -> Sightings:
    n, m = len(kept), len(unknown)
    none = np.zeros((0, 2))
    return Sightings(
        row=np.zeros(n + m, np.int64),
        kind=np.array([*(one.kind.name for one in kept), *[""] * m], dtype=np.str_),
        side=np.array(["down" if one.kind.down else "up" for one in kept] + [""] * m, dtype=np.str_),
        xy_mm=np.array([one.xy_mm for one in kept] + [xy for xy, _ in unknown]).reshape(-1, 2),
        yaw_rad=np.array([float(one.fit.pose[2]) for one in kept] + [0.0] * m),
        score=np.array([one.fit.share for one in kept] + [0.0] * m),
        sigma_mm=np.array([one.fit.sigma_mm for one in kept] + [1.0] * m),
        sigma_rad=np.array([one.fit.sigma_rad for one in kept] + [np.pi] * m),
        outline_mm=tuple([none] * n + [outline for _, outline in unknown]),
        lean_mm=np.array([one.fit.lean_mm for one in kept] + [np.zeros(2)] * m).reshape(-1, 2),
    )  # fmt: skip
