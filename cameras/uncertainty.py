"""A picture of how sure the plane map is over the field."""

import numpy as np
from matplotlib.figure import Figure

from cameras.field import Field
from cameras.plane import PlaneFit

_LONGEST_ARROW = 0.12  # of the field's width


def draw_uncertainty(fit: PlaneFit, field: Field) -> Figure:
    """95 % radius of the map's error over the field (cell frame, mm), the touches, and their residuals as arrows."""
    figure = Figure(figsize=(7.5, 6), layout="constrained")
    ax = figure.subplots()
    x, y = field.points_mm[..., 0], field.points_mm[..., 1]
    if np.isfinite(field.radius_95_mm).any():
        radius = np.ma.masked_invalid(field.radius_95_mm)
        shown = ax.contourf(np.nan_to_num(x), np.nan_to_num(y), radius, levels=12, cmap="viridis")
        figure.colorbar(shown, ax=ax, label="95 % of the map's errors are within [mm]")
    else:
        ax.set_facecolor("0.5")
    touched, off = fit.points, fit.residuals_mm
    worst = float(np.linalg.norm(off[fit.kept], axis=1).max())
    times = _LONGEST_ARROW * float(np.nanmax(x) - np.nanmin(x)) / max(worst, 1e-9)
    times = float(f"{times:.0e}")
    ax.quiver(*touched[fit.kept, :2].T, *(times * off[fit.kept]).T, angles="xy", scale_units="xy", scale=1.0,
              width=0.003, color="white")  # fmt: skip
    ax.plot(*touched[fit.kept, :2].T, "o", color="white", markersize=4, label="touch")
    if not fit.kept.all():
        ax.plot(*touched[~fit.kept, :2].T, "X", color="tab:red", markersize=9, label="touch left out")
    ax.set(aspect="equal", xlabel="x [mm]", ylabel="y [mm]",
           title=f"Plane map at z = {field.height_mm:g} mm; residuals drawn {times:g} times as long")
    ax.legend(loc="upper right", framealpha=0.7, facecolor="0.4", labelcolor="white")
    return figure
