"""The picture of a score: how far off parts are, which way, and where in the field."""

from pathlib import Path

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray

from pipeline.score import Score

FloatArray = NDArray[np.float64]

ARROW_SHARE = 0.06
LONG = 5.0  # a field this many times as long as wide, as a run of belt is, is drawn out of scale


def plot_errors(score: Score, path: Path, field: tuple[FloatArray, FloatArray] | None = None) -> None:
    """Draw a score to a PNG file: errors by size and direction, and over the field.

    field: places (k, 2) in the cell frame at which sightings were made, and their errors (k, 2), in mm; without it the
    errors of parts are drawn where they lie at counts 0, with what was missed, invented and listed twice.
    """
    figure = Figure(figsize=(15, 5.5), layout="constrained")
    scatter, spread, over = figure.subplots(1, 3, width_ratios=[1, 1, 1.4])
    _directions(scatter, score)
    _shares(spread, score)
    if field is None:
        _over_field(over, score.found.xy_mm, score.error_mm, "parts at counts 0")
        _not_right(over, score)
    else:
        _over_field(over, *field, "sightings where they were made")
    figure.savefig(path, dpi=100, format="png")


def _directions(ax: Axes, score: Score) -> None:
    """Each part's error as a point, a circle round half and round 95 % of them."""
    for kind in np.unique(score.found.kind[np.isfinite(score.error_mm[:, 0])]):
        x, y = score.error_mm[score.found.kind == kind].T
        ax.scatter(x, y, s=12, alpha=0.7, linewidths=0, label=str(kind).replace("$", r"\$"))
    distance = _finite(np.hypot(*score.error_mm.T))
    turn = np.linspace(0, 2 * np.pi, 200)
    for share, style in ((50, "-"), (95, "--")):
        if len(distance):
            radius = float(np.percentile(distance, share))
            label = f"{share} % within {radius:.3f} mm"
            ax.plot(radius * np.cos(turn), radius * np.sin(turn), style, color="0.3", lw=1, label=label)
    ax.axhline(0, color="0.8", lw=0.8, zorder=0)
    ax.axvline(0, color="0.8", lw=0.8, zorder=0)
    ax.set(xlabel="x found less true, mm", ylabel="y found less true, mm", title="position errors")
    ax.set_aspect("equal", adjustable="datalim")
    _legend(ax)


def _shares(ax: Axes, score: Score) -> None:
    """The share of parts within an error, for position and for yaw."""
    for name, errors, colour in (("position, mm", np.hypot(*score.error_mm.T), "#4477aa"),
                                 ("yaw, degrees", np.degrees(np.abs(score.error_rad)), "#ddaa33")):
        errors = np.sort(_finite(errors))
        if len(errors):
            share = 100 * np.arange(1, len(errors) + 1) / len(errors)
            ax.step(np.append(0, errors), np.append(0, share), where="post", color=colour, label=name)
    ax.axhline(95, color="0.7", lw=0.8, ls="--", zorder=0)
    ax.set(xlabel="error", ylabel="parts within it, %", ylim=(0, 101), title="how many are how far off")
    ax.set_xlim(left=0)
    ax.grid(alpha=0.2)
    _legend(ax)


def _over_field(ax: Axes, places_mm: FloatArray, errors_mm: FloatArray, what: str) -> None:
    """An arrow for each error where it was made; the longest, ARROW_SHARE wide, stand for twice the median and more."""
    good = np.isfinite(errors_mm).all(axis=1)
    places_mm, errors_mm = places_mm[good], errors_mm[good]
    ax.set(xlabel="x, mm", ylabel="y, mm", title=f"{what}: which way they are off")
    if not len(places_mm):
        return
    distance = np.hypot(*errors_mm.T)
    much = max(2 * float(np.median(distance)), 1e-9)
    shown = errors_mm * np.minimum(1.0, much / np.maximum(distance, much))[:, None]
    arrows = ax.quiver(*places_mm.T, *shown.T, distance, angles="uv", scale_units="width",
                       scale=much / ARROW_SHARE, cmap="viridis", clim=(0, much), width=0.004, zorder=3)
    ax.figure.colorbar(arrows, ax=ax, label="error, mm", extend="max", shrink=0.8)
    ax.plot(*places_mm.T, ".", color="0.7", ms=2, zorder=1)
    if np.ptp(places_mm, axis=0).min() * LONG > np.ptp(places_mm, axis=0).max():
        ax.set_aspect("equal", adjustable="datalim")
    ax.margins(0.1)


def _not_right(ax: Axes, score: Score) -> None:
    """Marks at what was missed, invented, listed twice or taken for another kind."""
    spare = score.found.counts & (score.partner < 0)
    for label, at, marker, colour in (
        ("missed", score.true.xy_mm[score.missed], "x", "crimson"),
        ("invented", score.found.xy_mm[spare & ~score.again], "+", "crimson"),
        ("listed twice", score.found.xy_mm[spare & score.again], "s", "darkorange"),
        ("wrong kind", score.found.xy_mm[score.paired & ~score.right], "D", "purple"),
        ("wrong side", score.found.xy_mm[score.wrong_side], "v", "purple"),
    ):
        if len(at):
            face = colour if marker in "x+" else "none"
            ax.scatter(at[:, 0], at[:, 1], marker=marker, c=face, edgecolors=None if marker in "x+" else colour, s=45,
                       label=f"{label}: {len(at)}")
    _legend(ax)


def _legend(ax: Axes) -> None:
    if ax.get_legend_handles_labels()[0]:
        ax.legend(fontsize="small", loc="best")


def _finite(values: FloatArray) -> FloatArray:
    return values[np.isfinite(values)]
