"""Closed chains of pixels round a part, moved onto the edges of its image."""

import cv2
import numpy as np
from numpy.typing import NDArray

from cameras.edges import MOST_SAMPLES, edge_along

FloatArray = NDArray[np.float64]
Grey = NDArray[np.uint8]

BAND_PX, SIDEWAYS = 6.0, 0.5  # how far off an edge is looked for; what a step sideways costs, roots of grey levels
ANY_SIGN = 0.85  # worth of a path that is lighter outside here, and darker there
CHAMFER_PX, CHAMFER_REACH_PX, CHAMFER_STEP = 2.0, 1.2, 0.5  # its step is at least half the edge's


def even(polygon: FloatArray, spacing: float, smooth: float = 0.0) -> FloatArray:
    """A closed polygon with its points evenly `spacing` apart, after Gaussian smoothing along it by `smooth`."""
    closed = np.vstack([polygon, polygon[:1]])
    at = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(closed, axis=0), axis=1))])
    fine = max(int(np.ceil(at[-1] / (spacing / 4 if smooth else spacing))), 8)
    want = np.linspace(0.0, at[-1], fine, endpoint=False)
    points = np.column_stack([np.interp(want, at, closed[:, k]) for k in range(2)])
    if not smooth:
        return points
    step = at[-1] / fine
    frequency = np.fft.fftfreq(fine, step)[:, None]
    low = np.fft.ifft(np.fft.fft(points, axis=0) * np.exp(-2.0 * (np.pi * frequency * smooth) ** 2), axis=0).real
    return np.asarray(low[::4])


def outward(polygon: FloatArray) -> FloatArray:
    """Unit normals (n, 2) of a closed polygon's points, away from its inside."""
    along = np.roll(polygon, -1, axis=0) - np.roll(polygon, 1, axis=0)
    normal = np.column_stack([along[:, 1], -along[:, 0]])
    x, y = polygon.T
    if np.sum(x * np.roll(y, -1) - y * np.roll(x, -1)) < 0.0:
        normal = -normal
    return np.asarray(normal / np.maximum(np.linalg.norm(normal, axis=1), 1e-12)[:, None])


def snapped(grey: Grey, chain: FloatArray, symmetric: bool) -> tuple[FloatArray, FloatArray]:
    """A closed chain of pixels (n, 2) moved onto the image's edges along its normals; and the edges' grey steps.

    A symmetric part's outline keeps to one edge all along, by which it can be centred.
    """
    profile, found = np.empty(MOST_SAMPLES), np.empty(2)
    points, steps = chain, np.zeros(len(chain))
    for smooth in (3.0, 2.0) if symmetric else ():
        points = even(points, 1.0, smooth)
        normals = outward(points)
        points = points + along_one_edge(grey, points, normals)[:, None] * normals
    for reach, smooth in ((1.5, 1.2), (1.5, 0.6)) if symmetric else ((4.0, 2.0), (2.5, 1.2), (1.5, 0.6)):
        points = even(points, 1.0, smooth)
        normals = outward(points)
        moved = np.zeros((len(points), 2))
        for k, ((u, v), (nu, nv)) in enumerate(zip(points, normals, strict=True)):
            edge_along(grey, u, v, nu, nv, reach, 3.0, 0.0, 1.0, True, profile, found)
            moved[k] = found
        seen = moved[:, 1] != 0.0
        if seen.sum() < 8:
            return points, moved[:, 1]
        at = np.arange(len(points))
        offset = np.interp(at, at[seen], moved[seen, 0], period=len(points))
        wide = np.concatenate([offset[-2:], offset, offset[:2]])
        offset = np.median(np.lib.stride_tricks.sliding_window_view(wide, 5), axis=1)
        points, steps = points + offset[:, None] * normals, moved[:, 1]
    return points if symmetric else _beyond_chamfer(grey, points, steps), steps


def along_one_edge(grey: Grey, points: FloatArray, normals: FloatArray) -> FloatArray:
    """Offsets (n,) in pixels along the normals of a closed chain to the edge that runs most clearly all along it.

    The steepest path round the chain whose offset changes by no more than one step from point to point (Amini, Weymouth
    and Jain, IEEE PAMI 12(9), 1990), of one sign all along if that loses little: a chamfer has two edges side by side,
    and a shadow another, and jumping between them would make an outline of none.
    """
    offsets = np.arange(-BAND_PX, BAND_PX + 0.25, 0.5)
    smooth = cv2.GaussianBlur(grey.astype(np.float32), (0, 0), 0.7)
    at = points[:, None, :] + offsets[None, :, None] * normals[:, None, :]
    level = cv2.remap(smooth, at[..., 0].astype(np.float32), at[..., 1].astype(np.float32), cv2.INTER_LINEAR,
                      borderMode=cv2.BORDER_REPLICATE)  # fmt: skip
    slope = np.zeros_like(level, dtype=np.float64)
    slope[:, 2:-2] = level[:, 4:] - level[:, :-4]
    paths = [_steepest(np.maximum(-slope, 0.0)), _steepest(np.maximum(slope, 0.0)), _steepest(np.abs(slope))]
    worths = [float(np.sum(np.sqrt(np.abs(slope[np.arange(len(path)), path])) * share)) for path, share in
              zip(paths, (1.0, 1.0, ANY_SIGN), strict=True)]  # fmt: skip
    return np.asarray(offsets[paths[int(np.argmax(worths))]])


def _steepest(slope: FloatArray) -> NDArray[np.int64]:
    """The path (n,) of columns over the rows of slopes (n, k), closed, with the largest sum of their square roots."""
    gain = np.tile(np.sqrt(slope), (2, 1))  # twice round, so that the ends meet
    n, k = gain.shape
    best, came = gain[0].copy(), np.zeros((n, k), np.int64)
    columns = np.arange(k)
    for row in range(1, n):
        padded = np.concatenate([[-np.inf], best, [-np.inf]])
        three = np.stack([padded[:-2] - SIDEWAYS, padded[1:-1], padded[2:] - SIDEWAYS])
        step = np.argmax(three, axis=0)
        came[row] = columns + step - 1
        best = three[step, columns] + gain[row]
    path = np.empty(n, np.int64)
    path[-1] = int(np.argmax(best))
    for row in range(n - 1, 0, -1):
        path[row - 1] = came[row, path[row]]
    half = n // 2
    quarter = half // 2
    return np.concatenate([path[half : half + quarter], path[quarter:half]])


def _beyond_chamfer(grey: Grey, points: FloatArray, steps: FloatArray) -> FloatArray:
    """Outline pixels moved on, where a narrow dark chamfer lies between the edge and the belt, to the chamfer's end."""
    normals = outward(points)
    profile, found = np.empty(MOST_SAMPLES), np.empty(2)
    on = np.zeros(len(points))
    for k, ((u, v), (nu, nv)) in enumerate(zip(points + CHAMFER_PX * normals, normals, strict=True)):
        least = CHAMFER_STEP * abs(steps[k]) + 3.0
        edge_along(grey, u, v, nu, nv, CHAMFER_REACH_PX, least, -steps[k], 0.6, True, profile, found)
        if found[1] * steps[k] < 0.0:
            on[k] = CHAMFER_PX + found[0]
    near = np.lib.stride_tricks.sliding_window_view(np.concatenate([on[-3:], on, on[:3]]), 7)
    return np.asarray(points + np.median(near, axis=1)[:, None] * normals)
