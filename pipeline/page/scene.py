"""What the desk draws: cell, parts, picks, motion and frames as one JSON document. Times less the subject's zero."""

import json
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from pipeline.page.drawn import thinned
from pipeline.page.glyphs import COLOURS, shape_of
from pipeline.page.head import words
from pipeline.page.pack import packed
from pipeline.page.sights import frames
from pipeline.page.subject import Subject
from pipeline.trajectory import sampled

STEP_S = 0.01
MOST_SAMPLES = 60_000
JOINT_STEPS = (0.0002, 0.0002, 0.05, 0.0005)  # rad, for J3 mm: what packed joints are rounded to
TRAVEL_STEP_MM = 0.1
BESIDE_MM = 40.0  # of belt shown beside the outermost parts


def scene(subject: Subject) -> str:
    """The document as text that may stand inside a script element."""
    document = {
        "start": _t(subject, subject.run.start_s), "end": _t(subject, _end_s(subject)), "arm": _arm(subject),
        "belt": _belt(subject), "kinds": _kinds(subject), "places": _places(subject),
        "keepouts": [{"name": k.name, "at": _flat(k.polygon_mm)} for k in subject.setting.cell.keepouts],
        "parts": _parts(subject), "picks": _picks(subject), "motion": _motion(subject),
        "downs": _downs(subject),
        "waits": [[_t(subject, way.depart_s), _t(subject, way.end_s)] for way in subject.run.waits],
        "view": _view(subject),
        "frames": frames(subject),
    }  # fmt: skip
    text = json.dumps(document, separators=(",", ":"), allow_nan=False)
    return text.replace("<", "\\u003c").replace(">", "\\u003e").replace("&", "\\u0026")


def _t(subject: Subject, at_s: float) -> float | None:
    return round(at_s - subject.zero_s, 4) if np.isfinite(at_s) else None


def _end_s(subject: Subject) -> float:
    home = subject.run.home
    return max(subject.run.end_s, home.end_s if home else -np.inf)


def _flat(points: ArrayLike) -> list[float]:
    """Points (n, 2) as x, y, x, y, ..."""
    return [round(value, 2) for value in np.asarray(points, np.float64).ravel().tolist()]


def _arm(subject: Subject) -> dict[str, Any]:
    arm = subject.setting.mover.arm
    return {"base": _flat(arm.base_mm[:2]), "links": [arm.link1_mm, arm.link2_mm], "baseYaw": arm.base_yaw,
            "sense": arm.sense.tolist(), "offset": _flat(arm.offset_mm), "toolYaw": arm.tool_yaw,
            "radius": arm.link_radius_mm, "home": arm.home.tolist(), "foot": arm.flange_z_mm - arm.tool_length_mm,
            "lead": arm.lead, "jaws": [_flat(jaw) for jaw in subject.setting.cell.tool.footprint_mm]}  # fmt: skip


def _belt(subject: Subject) -> dict[str, Any] | None:
    cell, belt = subject.setting.cell, subject.setting.belt
    if cell.belt is None:
        return None
    left = np.array([-belt.heading[1], belt.heading[0]])
    across = [float(part.xy_mm @ left) for part in subject.run.parts] or [-BESIDE_MM, BESIDE_MM]
    end = _end_s(subject)
    step = max(0.02, (end - subject.run.start_s) / MOST_SAMPLES)
    times = np.arange(subject.run.start_s, end + step, step)
    return {"heading": belt.heading.tolist(), "window": cell.belt.window_mm, "step": step,
            "across": [round(min(across) - BESIDE_MM, 1), round(max(across) + BESIDE_MM, 1)],
            "travel": packed(belt.travel_mm(times), TRAVEL_STEP_MM), "unit": TRAVEL_STEP_MM}  # fmt: skip


def _kinds(subject: Subject) -> list[dict[str, Any]]:
    told = []
    for k, name in enumerate(subject.kinds):
        outline = subject.setting.outlines.get(name, 12.0)
        told.append({"name": name, "colour": k % COLOURS, "mark": shape_of(k),
                     "outline": outline if isinstance(outline, float | int) else _flat(thinned(outline)),
                     "jaws": [_flat(jaw) for jaw in subject.setting.cell.parts[name].footprint_mm]})  # fmt: skip
    return told


def _places(subject: Subject) -> list[dict[str, Any]]:
    return [{"name": place.name, "slots": _flat(place.slots_mm[:400, :2]), "count": len(place.slots_mm)}
            for place in subject.setting.grasping.places.values()]  # fmt: skip


def _parts(subject: Subject) -> list[dict[str, Any]]:
    told = []
    for k, part in enumerate(subject.run.parts):
        fate, window = subject.run.fates[k], subject.windows[k]
        entry: dict[str, Any] = {
            "no": part.number, "kind": subject.kinds.index(part.kind) if part.kind in subject.kinds else -1,
            "at": [*_flat(part.xy_mm), round(part.yaw_rad, 4)], "down": int(part.side == "down"),
            "known": _t(subject, window.known_s), "enters": _t(subject, window.enters_s),
            "leaves": _t(subject, window.leaves_s), "pick": subject.pick_of.get(part.number, -1),
            "why": f"{words(fate.reason)}: {fate.detail}" if fate else "",
        }  # fmt: skip
        if len(part.outline_mm):
            entry["outline"] = _flat(thinned(part.outline_mm))
        told.append(entry)
    return told


def _picks(subject: Subject) -> list[dict[str, Any]]:
    row = {part.number: k for k, part in enumerate(subject.run.parts)}
    places = list(subject.setting.grasping.places)
    told = []
    for pick in subject.run.picks:
        c = pick.cycle
        edges = (c.depart_s, c.across_s, c.met_s, c.grasp_start_s, c.grasp_end_s, c.left_s, c.there_s,
                 c.release_start_s, c.release_end_s)  # fmt: skip
        told.append({"part": row[pick.part.number], "decided": _t(subject, pick.decided_s),
                     "edges": [_t(subject, edge) for edge in edges], "place": places.index(pick.place),
                     "slot": pick.slot, "view": pick.looked_at, "released": _t(subject, pick.release_start_s),
                     "kept": int(pick.set_down is not None)})  # fmt: skip
    return told


def _downs(subject: Subject) -> list[list[float | None]]:
    """Index and edges (depart, across, there, release start and end) of picks set down after later ones, in time."""
    told = [(k, pick.set_down) for k, pick in enumerate(subject.run.picks) if pick.set_down]
    return [[k, *(_t(subject, edge) for edge in down.edges)] for k, down in sorted(told, key=lambda d: d[1].there_s)]


def _motion(subject: Subject) -> dict[str, Any] | None:
    lasts = _end_s(subject) - subject.run.start_s
    step = max(STEP_S, lasts / MOST_SAMPLES)
    times, joints = sampled(subject.run, step)
    if not len(times):
        return None
    return {"start": _t(subject, float(times[0])), "step": step, "units": JOINT_STEPS,
            "joints": [packed(joints[:, j], JOINT_STEPS[j]) for j in range(4)]}  # fmt: skip


def _view(subject: Subject) -> list[float]:
    """Least and greatest x, y shown: window, places, keep-outs, the arm's base, and on a tray the parts."""
    setting, arm = subject.setting, subject.setting.mover.arm
    shown = [arm.base_mm[None, :2] + arm.link_radius_mm, arm.base_mm[None, :2] - arm.link_radius_mm]
    shown += [place.slots_mm[:, :2] for place in setting.grasping.places.values()]
    shown += [np.array(keepout.polygon_mm) for keepout in setting.cell.keepouts]
    belt = _belt(subject) if setting.cell.belt else None
    if belt is None:
        shown += [part.xy_mm[None] for part in subject.run.parts]
    else:
        heading = setting.belt.heading
        left = np.array([-heading[1], heading[0]])
        reach = arm.link1_mm + arm.link2_mm
        low, high = belt["window"] or (-reach, reach)
        shown += [np.array([a * heading + b * left for a in (low - 120, high + 60) for b in belt["across"]])]
    points = np.vstack(shown)
    named = np.array([30, 50])  # above a place its name is written
    return _flat([points.min(axis=0) - 30, points.max(axis=0) + named])
