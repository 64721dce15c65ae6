"""A look over a whole cell: the files it names, and whether arm, belt and places go together."""

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from cameras.camera import load_camera
from cameras.faults import InputFault, InputFaults
from cameras.model import load_model
from pipeline.budget import ErrorBudget, budgets_of, maps_at_hand
from pipeline.cell import Cell
from pipeline.reach import Reacher


@dataclass(frozen=True)
class Verdict:
    """One check: what was looked at, whether it is well, and what was found."""

    what: str
    well: bool
    found: str


def check_cell(cell: Cell) -> list[Verdict]:
    """Every check of a cell. Raises InputFaults where files that it names can't be used."""
    files = list(_files(cell))
    reacher = Reacher(cell)
    return [*files, _home(reacher), *_window(reacher), *_slots(reacher), *_carry(cell), *_budget(cell)]


def _files(cell: Cell) -> Iterator[Verdict]:
    """Calibrations and models: a missing one is a failed check, a broken one a fault of the input."""
    named: list[tuple[str, str | None, Callable[[Path], object], str]]
    named = [(f"calibration of {camera.name}", camera.calibration, load_camera, "sanderling calibrate plane")
             for camera in cell.cameras]
    named += [(f"model of {kind}", part.model, load_model, "sanderling teach") for kind, part in cell.parts.items()]
    faults: list[InputFault] = []
    for what, path, load, writer in named:
        if path is None:
            yield Verdict(what, True, "none named: poses made elsewhere are needed")
        elif not cell.beside(path).is_file():
            yield Verdict(what, False, f"{path} is not there: write it with `{writer}`")
        else:
            yield Verdict(what, *_read(load, cell.beside(path), faults))
    if faults:
        raise InputFaults(faults)


def _read(load: Callable[[Path], object], path: Path, faults: list[InputFault]) -> tuple[bool, str]:
    try:
        load(path)
    except InputFault as fault:
        faults.append(fault)
        return False, "cannot be used"
    return True, path.name


def _home(reacher: Reacher) -> Verdict:
    """The posture a run starts in keeps its margins and stands in no keep-out."""
    home = reacher.arm.home
    spare = np.minimum(home - reacher.lower, reacher.upper - home)
    near = reacher.keepouts.near(home)
    units = [(1.0, "mm") if n == 2 else (180 / np.pi, "deg") for n in range(4)]
    over = [f"J{n + 1} is {-spare[n] * units[n][0]:.2f} {units[n][1]} inside its margin"
            for n in np.flatnonzero(spare < 0)]
    if near.gap_mm[0] < 0:
        over.append(f"stands {-near.gap_mm[0]:.1f} mm inside keep-out {reacher.keepouts.names[near.keepout[0]]}")
    tip = reacher.arm.forward(home)
    return Verdict("home", not over, "; ".join(over) or f"tool tip at {tip[0]:.0f}, {tip[1]:.0f}, {tip[2]:.0f} mm")


def _window(reacher: Reacher) -> Iterator[Verdict]:
    """Something in the window can be gripped."""
    if reacher.cell.parts:
        share = reacher.window().share[:, 2]
        what = "belt window" if reacher.cell.belt else "tray"
        yield Verdict(what, bool(share.any()), f"{100 * np.mean(share > 0):.0f} % of the points looked at can be "
                      "gripped (more with `sanderling reach`)")


def _slots(reacher: Reacher) -> Iterator[Verdict]:
    """Every slot can be served at one of its yaws."""
    for place in reacher.slots():
        served = place.share[:, 2] > 0
        missing = ", ".join(str(slot) for slot in place.slot[~served][:8])
        found = f"{served.sum()} of {len(place)} slots served" + (f", not {missing}" if missing else "")
        yield Verdict(f"place {place.where[0]}", not missing, found)


def _carry(cell: Cell) -> Iterator[Verdict]:
    """On the way across, a carried part passes above those that lie."""
    if cell.parts:
        hang = max(part.grasp_mm for part in cell.parts.values())
        tallest = max(part.height_mm for part in cell.parts.values())
        room = cell.motion.travel_mm - hang - cell.surface_mm - tallest
        yield Verdict("way across", room >= 0, f"a carried part passes {room:.1f} mm above the tallest that lies"
                      if room >= 0 else f"a carried part may meet one that lies by {-room:.1f} mm: raise travel_mm")


def budgets(cell: Cell) -> list[ErrorBudget]:
    """What is known of the errors at the gripper before anything has been seen."""
    return budgets_of(cell, maps_at_hand(cell, [camera.name for camera in cell.cameras]))


def _budget(cell: Cell) -> Iterator[Verdict]:
    """What is known of the errors at the gripper leaves room in what the grips tolerate."""
    for one in budgets(cell):
        if one.told:
            total, without = one.total, ", ".join(one.missing)
            limits = [(total.within_mm, one.tolerance_mm, "mm"), (total.within_deg, one.tolerance_deg, "deg")]
            found = " and ".join(f"{within:.3f} of {limit:g} {unit}" for within, limit, unit in limits
                                 if limit is not None and not (unit == "deg" and one.round))
            yield Verdict(f"grip of {one.part}", one.met,
                          f"95 % within {found}" + (f", without {without}" if without else ""))
