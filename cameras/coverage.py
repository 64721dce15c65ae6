"""Where in the image a board was seen: corners left out, and a picture."""

from collections.abc import Sequence

import numpy as np
from matplotlib.figure import Figure
from matplotlib.patches import Circle
from numpy.typing import NDArray

from cameras.boards import View

_NEAR = 0.15  # of the image diagonal


def uncovered_corners(views: Sequence[View]) -> list[str]:
    """Names of the image's corners that no board corner came near (within 15 % of the diagonal)."""
    width, height = views[0].image_size_px
    seen = np.concatenate([view.pixels for view in views])
    corners = {"top left": (0, 0), "top right": (width - 1, 0),
               "bottom left": (0, height - 1), "bottom right": (width - 1, height - 1)}  # fmt: skip
    return [name for name, corner in corners.items()
            if np.linalg.norm(seen - corner, axis=1).min() > _NEAR * np.hypot(width, height)]


def draw_coverage(
    views: Sequence[View], view_rms_px: NDArray[np.float64], spoilers: Sequence[int] = ()
) -> Figure:
    """Board corners of all views over the image, coloured by the view's RMS; views that spoil the fit are crossed."""
    figure = Figure(figsize=(7, 5.6), layout="constrained")
    ax = figure.subplots()
    width, height = views[0].image_size_px
    seen = np.concatenate([view.pixels for view in views])
    rms = np.repeat(view_rms_px, [len(view.pixels) for view in views])
    dots = ax.scatter(seen[:, 0], seen[:, 1], c=rms, s=9, cmap="viridis", vmin=0.0)
    for k in spoilers:
        ax.plot(*views[k].pixels.T, "x", color="tab:red", markersize=5, linestyle="none")
    for x, y in ((0, 0), (width, 0), (0, height), (width, height)):
        ax.add_patch(Circle((x, y), _NEAR * float(np.hypot(width, height)), color="tab:orange", alpha=0.15))
    ax.set(xlim=(0, width), ylim=(height, 0), aspect="equal", xlabel="u [px]", ylabel="v [px]",
           title="Board corners seen; each shaded corner of the image needs some")
    figure.colorbar(dots, ax=ax, label="RMS of the view [px]")
    return figure
