"""Found against true: what was missed, invented, listed twice or mistaken, and by how much poses are off."""

import csv
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from cameras.columns import Column, read_columns
from cameras.faults import InputFault, printable
from pipeline.follow.associate import Pair, best_pairs

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
Flags = NDArray[np.bool_]

MATCH_MM = 5.0  # a found part within this of a true one is that part
DOUBLE_MM = 10.0  # a spare one within this of a true part is that part again; further off it is invented
UNCLAIMED = ("unknown", "low_score")  # reasons of rows that claim no part of a known kind
FARTHEST_MM = 1e9
COVERED = 1.96  # standard deviations that hold 95 % of a normal error


@dataclass(frozen=True)
class Poses:
    """Parts found or true, at counts 0 in the cell frame; n of them.

    number (n,); kind, side (n,) str; xy_mm (n, 2); yaw_rad (n,).  counts (n,) bool: found ones: claims a part of its
    kind; true ones: was to be found.  frame (n,): of a tray, -1 where it makes no difference.
    sigma_mm, sigma_rad (n,): predicted standard deviations, NaN where not given.
    """

    number: IntArray
    kind: NDArray[np.str_]
    side: NDArray[np.str_]
    xy_mm: FloatArray
    yaw_rad: FloatArray
    counts: Flags
    frame: IntArray
    sigma_mm: FloatArray
    sigma_rad: FloatArray

    def __len__(self) -> int:
        return len(self.number)


@dataclass(frozen=True)
class Score:
    """Which found part is which true one, and how far off.

    found, true: the poses compared.  partner (found,): row of `true`, -1 for none.  again (found,) bool: a true part
    listed twice.  error_mm (found, 2): found less true, error_rad (found,): modulo symmetry; NaN where there is no
    partner of that kind, where it lies on its wrong side, and for the yaw of round parts or of unknown symmetry.
    """

    found: Poses
    true: Poses
    partner: IntArray
    again: Flags
    error_mm: FloatArray
    error_rad: FloatArray

    @property
    def paired(self) -> Flags:
        """(found,) whether it claims a part and has a partner."""
        return self.found.counts & (self.partner >= 0)

    @property
    def right(self) -> Flags:
        """(found,) whether it is a true part of its kind."""
        return np.asarray(self.paired & (self.found.kind == self._partners(self.true.kind)))

    @property
    def missed(self) -> Flags:
        """(true,) whether it was to be found and was not."""
        return self.true.counts & ~np.isin(np.arange(len(self.true)), self.partner[self.right])

    @property
    def wrong_side(self) -> Flags:
        """(found,) whether it is a true part said to lie on its other side."""
        side = self._partners(self.true.side)
        return np.asarray(self.right & (self.found.side != "") & (side != "") & (self.found.side != side))

    def _partners(self, names: NDArray[np.str_]) -> NDArray[np.str_]:
        """(found,) the partner's name, "" where there is no partner."""
        return np.append(names, "")[self.partner]

    def figures(self) -> dict[str, float]:
        """Every figure by name; NaN where there is nothing to take it from."""
        claims, right, spare = self.found.counts, self.right, self.found.counts & (self.partner < 0)
        distance, turned = np.hypot(*self.error_mm.T), np.degrees(np.abs(self.error_rad))
        sigmas = np.abs(self.error_mm) / self.found.sigma_mm[:, None], np.abs(self.error_rad) / self.found.sigma_rad
        return {
            "true": float(self.true.counts.sum()),
            "claimed": float(claims.sum()),
            "recall": _share(~self.missed[self.true.counts]),
            "precision": _share(right[claims]),
            "missed": float(self.missed.sum()),
            "invented": float((spare & ~self.again).sum()),
            "doubles": float((spare & self.again).sum()),
            "wrong_kind": float((self.paired & ~right).sum()),
            "wrong_side": float(self.wrong_side.sum()),
            "wrong_side_called_up": float((self.wrong_side & (self.found.side == "up")).sum()),
            **_percentiles("position_{}_mm", distance),
            **_percentiles("yaw_{}_deg", turned),
            "mean_x_mm": _mean(self.error_mm[:, 0]),
            "mean_y_mm": _mean(self.error_mm[:, 1]),
            "position_coverage": _share(sigmas[0][np.isfinite(sigmas[0])] <= COVERED),
            "yaw_coverage": _share(sigmas[1][np.isfinite(sigmas[1])] <= COVERED),
        }


def score(found: Poses, true: Poses, turns: Mapping[str, int] | None = None, match_mm: float = MATCH_MM) -> Score:
    """Pair found with true parts and compare them.

    Parts of one kind are paired first, then what is left over across kinds: within match_mm, most pairs, then the least
    sum of distances. turns: of each kind, how many yaws look alike, 0 for a round one; without it no yaw is compared.
    """
    partner = np.full(len(found), -1, dtype=np.int64)
    for kind in np.unique(true.kind):
        _pair(partner, found, found.kind == kind, true, true.kind == kind, match_mm)
    _pair(partner, found, found.counts, true, np.ones(len(true), dtype=bool), match_mm)
    same = np.flatnonzero(partner >= 0)
    same = same[(found.kind[same] == true.kind[partner[same]]) & (true.side[partner[same]] != "down")]
    error_mm, error_rad = np.full((len(found), 2), np.nan), np.full(len(found), np.nan)
    error_mm[same] = found.xy_mm[same] - true.xy_mm[partner[same]]
    turn = np.array([(turns or {}).get(str(kind), 0) for kind in found.kind[same]], dtype=float)
    off = (found.yaw_rad[same] - true.yaw_rad[partner[same]]) * turn
    error_rad[same] = np.where(turn > 0, np.arctan2(np.sin(off), np.cos(off)) / np.maximum(turn, 1), np.nan)
    again = (partner < 0) & (_nearest(found, true) <= max(DOUBLE_MM, match_mm))
    return Score(found, true, partner, again, error_mm, error_rad)


def read_parts(path: str | Path) -> Poses:
    """Parts found, from a replay's parts.csv. Raises InputFault naming file and line."""
    path = Path(path)
    more = {"part_no": int, "reason": str, "first_frame": int, "sigma_mm": float, "sigma_deg": float}
    table = _table(path, more)
    named = ~np.isin(table["part"], ["", "unknown"])
    claims = named & ~np.isin(table["reason"], UNCLAIMED) if "reason" in table else named
    return _poses(table, claims, table.get("first_frame"))


def read_truth(path: str | Path) -> Poses:
    """True poses, from truth.csv; a part that no frame shows whole is not to be found. Raises InputFault."""
    table = _table(Path(path), {"part_no": int, "frames_whole": int, "frame": int})
    shown = table.get("frames_whole", np.ones(len(table["line"]))).astype(np.int64) > 0
    return _poses(table, shown, table.get("frame"))


def over_limits(figures: Mapping[str, float], least: Mapping[str, float], most: Mapping[str, float]) -> list[str]:
    """One line for each figure that is below its least or above its most; a figure there is none of fails too."""
    told = [f"{name} is {figures[name]:.4g}, below {limit:g}" for name, limit in least.items()
            if not figures[name] >= limit]
    return told + [f"{name} is {figures[name]:.4g}, above {limit:g}" for name, limit in most.items()
                   if not figures[name] <= limit]


def write_errors(path: Path, score: Score) -> None:
    """A row for each part that claims a kind or was to be found: what became of it, and its errors."""
    found, true = score.found, score.true
    words = np.select([score.right & ~score.wrong_side, score.wrong_side, score.paired, score.again],
                      ["right", "wrong_side", "wrong_kind", "double"], "invented")
    with open(path, "w", newline="", encoding="utf-8") as file:
        table = csv.writer(file, lineterminator="\n")
        table.writerow(("part_no", "true_no", "part", "verdict", "x_error_mm", "y_error_mm", "yaw_error_deg"))
        for i in np.flatnonzero(found.counts):
            k, (x, y), yaw = score.partner[i], score.error_mm[i], np.degrees(score.error_rad[i])
            errors = [f"{value:.4f}" if np.isfinite(value) else "" for value in (x, y, yaw)]
            table.writerow((found.number[i], true.number[k] if k >= 0 else "", found.kind[i], words[i], *errors))
        for k in np.flatnonzero(score.missed):
            table.writerow(("", true.number[k], true.kind[k], "missed", "", "", ""))


def _table(path: Path, optional: Mapping[str, type]) -> dict[str, Column]:
    columns = {"part": str, "side": str, "x_mm": float, "y_mm": float, "yaw_deg": float}
    table = read_columns(path, columns, optional)
    for at in np.flatnonzero(~np.isin(table["side"], ["up", "down", ""]))[:1]:
        raise InputFault(path, f"line {table['line'][at]}, side", f"{printable(table['side'][at])!r} is no side",
                         "write up, down, or nothing where not known")
    for name in ("x_mm", "y_mm"):
        for at in np.flatnonzero(np.abs(table[name].astype(float)) > FARTHEST_MM)[:1]:
            raise InputFault(path, f"line {table['line'][at]}, {name}", "is nowhere near a cell", "give millimetres")
    return table


def _poses(table: dict[str, Column], counts: Flags, frame: Column | None) -> Poses:
    n = len(table["line"])
    sigma_mm, sigma_deg = (table.get(name, np.zeros(n)).astype(float) for name in ("sigma_mm", "sigma_deg"))
    return Poses(
        number=table["part_no"].astype(np.int64) if "part_no" in table else np.arange(n),
        kind=table["part"].astype(np.str_), side=table["side"].astype(np.str_),
        xy_mm=np.stack([table["x_mm"], table["y_mm"]], axis=-1).astype(float),
        yaw_rad=np.radians(table["yaw_deg"].astype(float)), counts=counts,
        frame=np.full(n, -1, dtype=np.int64) if frame is None else frame.astype(np.int64),
        sigma_mm=np.where(sigma_mm > 0, sigma_mm, np.nan),
        sigma_rad=np.where(sigma_deg > 0, np.radians(sigma_deg), np.nan),
    )  # fmt: skip


def _keys(poses: Poses, others: Poses) -> FloatArray:
    """(n, 3) place and, where both tell it, frame: things of different frames lie far apart."""
    told = (poses.frame >= 0).any() and (others.frame >= 0).any()
    return np.column_stack([poses.xy_mm, 1e3 * poses.frame if told else np.zeros(len(poses))])


def _pair(partner: IntArray, found: Poses, mine: Flags, true: Poses, theirs: Flags, match_mm: float) -> None:
    """Give those of `mine` that claim a part and have no partner yet one of `theirs` that has none."""
    free = np.flatnonzero(found.counts & mine & (partner < 0))
    wanted = np.setdiff1d(np.flatnonzero(theirs), partner)
    if not len(free) or not len(wanted):
        return
    here, there = cKDTree(_keys(found, true)[free]), cKDTree(_keys(true, found)[wanted])
    near = here.sparse_distance_matrix(there, match_mm, output_type="coo_matrix")
    pairs = [Pair(float(mm), int(free[i]), int(wanted[k]))
             for mm, i, k in zip(near.data, near.row, near.col, strict=True)]
    for i, k in best_pairs(pairs).items():
        partner[i] = k


def _nearest(found: Poses, true: Poses) -> FloatArray:
    """(found,) mm to the nearest true part; infinite where there is none."""
    if not len(found) or not len(true):
        return np.full(len(found), np.inf)
    return np.asarray(cKDTree(_keys(true, found)).query(_keys(found, true))[0])


def _share(good: Flags) -> float:
    return float(good.mean()) if good.size else float("nan")


def _mean(values: FloatArray) -> float:
    values = values[np.isfinite(values)]
    return float(values.mean()) if len(values) else float("nan")


def _percentiles(name: str, errors: FloatArray) -> dict[str, float]:
    errors = errors[np.isfinite(errors)]
    at = (("median", 50), ("p95", 95), ("max", 100))
    return {name.format(word): float(np.percentile(errors, share)) if len(errors) else float("nan")
            for word, share in at}
