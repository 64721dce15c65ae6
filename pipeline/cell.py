"""The cell file: read, checked, and held as frozen records in the file's own units (mm, degrees, seconds).

What is computed from a cell (`Arm`, `Belt`, slots) is in millimetres and radians; these records are the data sheet.
"""

import difflib
import tomllib
from collections.abc import Iterator
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from cameras.faults import InputFault, InputFaults, printable

RADIANS = 6.3  # limits of J1 and J2 within a turn in radians are taken for such
MOST_ON_TRAY = 200  # parts ordered at once where nothing moves
MOST_BYTES = 4 * 1024 * 1024

Number = Annotated[float, Field(strict=True, allow_inf_nan=False)]
Positive = Annotated[float, Field(strict=True, allow_inf_nan=False, gt=0)]
NotNegative = Annotated[float, Field(strict=True, allow_inf_nan=False, ge=0)]
Count = Annotated[int, Field(strict=True, ge=1, le=100_000)]
Flag = Annotated[bool, Field(strict=True)]
Name = Annotated[str, Field(strict=True, min_length=1, max_length=200)]
Point = tuple[Number, Number]
Polygon = Annotated[tuple[Point, ...], Field(min_length=3, max_length=1000)]


class CellError(InputFaults):
    """A cell file is wrong. `faults` holds one InputFault for each thing to mend: file, key, fault, remedy."""


class Record(BaseModel):
    """A section of the cell file: frozen, and closed to keys it does not know."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class Joint(Record):
    """Limits and sense of one joint; degrees, for J3 millimetres; per second, squared, cubed."""

    min: Number
    max: Number
    max_speed: Positive
    max_accel: Positive
    max_jerk: Positive | None = None
    positive: Literal["counterclockwise", "clockwise", "up", "down"] | None = None

    @model_validator(mode="after")
    def _ordered(self) -> "Joint":
        if self.min >= self.max:
            raise ValueError(f"min {self.min:g} is not below max {self.max:g}: swap or correct them")
        return self


class ArmCell(Record):
    """`[arm]`: geometry and joints of the arm."""

    link1_mm: Positive
    link2_mm: Positive
    base_mm: tuple[Number, Number, Number] = (0.0, 0.0, 0.0)
    base_yaw_deg: Number = 0.0
    flange_height_mm: Number
    quill_lead_mm_per_rev: Number = 0.0
    link_radius_mm: NotNegative = 0.0
    home: tuple[Number, Number, Number, Number]
    j1: Joint
    j2: Joint
    j3: Joint
    j4: Joint

    @model_validator(mode="after")
    def _degrees(self) -> "ArmCell":
        """No arm turns J1 and J2 by so few degrees: such limits are radians."""
        if all(max(abs(joint.min), abs(joint.max)) <= RADIANS for joint in (self.j1, self.j2)):
            turns = " and ".join(f"{joint.max - joint.min:g}" for joint in (self.j1, self.j2))
            raise ValueError(f"J1 and J2 turn by {turns} degrees only: write joints in degrees, not in radians")
        return self

    @property
    def joints(self) -> tuple[Joint, Joint, Joint, Joint]:
        """J1 to J4."""
        return self.j1, self.j2, self.j3, self.j4

    @model_validator(mode="after")
    def _senses_and_home(self) -> "ArmCell":
        for n, (joint, at) in enumerate(zip(self.joints, self.home, strict=True), 1):
            allowed = ("up", "down") if n == 3 else ("counterclockwise", "clockwise")
            if joint.positive is not None and joint.positive not in allowed:
                raise ValueError(f"j{n}.positive is {joint.positive}: write {' or '.join(allowed)}")
            if not joint.min <= at <= joint.max:
                raise ValueError(f"home puts J{n} at {at:g}, outside {joint.min:g} to {joint.max:g}: "
                                 "choose a home inside the limits")
        return self


class ToolCell(Record):
    """`[tool]`: where the tool tip is, what comes down beside a part, and its grippers: x, y, yaw in the tool frame."""

    offset_mm: Point = (0.0, 0.0)
    yaw_deg: Number = 0.0
    length_mm: Number = 0.0
    footprint_mm: tuple[Polygon, ...] = ()
    grippers: Annotated[tuple[tuple[Number, Number, Number], ...], Field(max_length=8)] = ()


class BeltCell(Record):
    """`[belt]`: the belt's height, direction and scale (and their standard errors), and its pick window."""

    surface_mm: Number
    heading_deg: Number
    mm_per_count: Number
    mm_per_count_error: NotNegative | None = None
    heading_error_deg: NotNegative | None = None
    counts_modulus: Annotated[int, Field(strict=True, ge=2)] | None = None
    window_mm: Point | None = None

    @model_validator(mode="after")
    def _window(self) -> "BeltCell":
        if self.window_mm is not None and self.window_mm[0] >= self.window_mm[1]:
            raise ValueError("window_mm must run from grasp start to grasp end, the smaller distance first")
        if self.mm_per_count == 0:
            raise ValueError("mm_per_count is 0: measure it with `sanderling calibrate belt`")
        return self


class TrayCell(Record):
    """`[tray]`: height of the surface still parts lie on."""

    surface_mm: Number = 0.0


class CameraCell(Record):
    """One of `[[cameras]]`; time_error_s: standard deviation of its time stamps."""

    name: Name = "overhead"
    calibration: Name | None = None
    latency_s: NotNegative = 0.0
    time_error_s: NotNegative | None = None


class GripCell(Record):
    """One of `[[parts.X.grips]]`: another pose of the tool tip, in the taught grip frame."""

    offset_mm: Point = (0.0, 0.0)
    yaw_deg: Number = 0.0
    grasp_mm: Number | None = None
    footprint_mm: tuple[Polygon, ...] = ()


class PartCell(Record):
    """`[parts.NAME]`: a kind of part."""

    model: Name | None = None
    height_mm: NotNegative = 0.0
    grasp_mm: Number
    symmetry: Annotated[int, Field(strict=True, ge=1, le=360)] | Literal["round"] = 1
    places: Annotated[tuple[Name, ...], Field(min_length=1)]
    weight: Positive = 1.0
    footprint_mm: tuple[Polygon, ...] = ()
    outline_radius_mm: Positive | None = None
    outline_mm: Polygon | None = None
    grips: tuple[GripCell, ...] = ()
    grip_tolerance_mm: Positive | None = None
    grip_tolerance_deg: Positive | None = None

    @property
    def turns(self) -> int:
        """How many yaws look and grip alike; 0: all of them (round)."""
        return 0 if self.symmetry == "round" else int(self.symmetry)


class PlaceCell(Record):
    """One of `[[places]]`: a grid of slots."""

    name: Name
    origin_mm: tuple[Number, Number, Number]
    yaw_deg: Number = 0.0
    slot_yaw_deg: Number = 0.0
    rows: Count = 1
    columns: Count = 1
    pitch_mm: Point = (0.0, 0.0)
    any_yaw: Flag = False
    endless: Flag = False

    @model_validator(mode="after")
    def _pitch(self) -> "PlaceCell":
        for count, pitch, word in ((self.columns, self.pitch_mm[0], "columns"), (self.rows, self.pitch_mm[1], "rows")):
            if count > 1 and pitch == 0:
                raise ValueError(f"{count} {word} with a pitch of 0: give the distance between {word}")
        if self.rows * self.columns > 100_000:
            raise ValueError("more than 100000 slots: reduce rows or columns")
        return self


class KeepoutCell(Record):
    """One of `[[keepouts]]`: a column that links and tool may pass only above."""

    name: str = ""
    polygon_mm: Polygon
    top_mm: Number


class MotionCell(Record):
    """`[motion]`: heights, dwells and margins."""

    travel_mm: Number
    clear_mm: Number | None = None
    approach_mm: NotNegative = 10.0
    grasp_s: NotNegative = 0.06
    release_s: NotNegative = 0.05
    limit_margin_deg: NotNegative = 1.0
    limit_margin_mm: NotNegative = 1.0
    singularity_deg: Annotated[float, Field(strict=True, ge=0, lt=90)] = 8.0

    @property
    def clear_height_mm(self) -> float:
        """Height of the tool tip above which it may move sideways."""
        return self.travel_mm if self.clear_mm is None else self.clear_mm

    @model_validator(mode="after")
    def _clear(self) -> "MotionCell":
        if self.clear_mm is not None and self.clear_mm > self.travel_mm:
            raise ValueError("clear_mm is above travel_mm: the way across would never be clear")
        return self


class OrderCell(Record):
    """`[order]`: how the sequence is chosen."""

    policy: Name = "lookahead"
    horizon: Annotated[int, Field(strict=True, ge=1, le=64)] = 12
    objective: Literal["picks", "travel"] = "picks"
    budget_ms: Positive | None = None


class Cell(Record):
    """A whole cell file. `file` is where it was read from; paths in it are relative to that file's folder."""

    format: Literal[1] = 1
    name: str = ""
    arm: ArmCell
    tool: ToolCell
    belt: BeltCell | None = None
    tray: TrayCell = TrayCell()
    cameras: tuple[CameraCell, ...] = ()
    parts: dict[Name, PartCell] = {}
    places: tuple[PlaceCell, ...] = ()
    keepouts: tuple[KeepoutCell, ...] = ()
    motion: MotionCell
    order: OrderCell = OrderCell()
    file: Path = Field(default=Path("cell.toml"), exclude=True)

    @property
    def horizon(self) -> int:
        """Parts looked at together: as the file says; otherwise 12 on a belt, and a whole tray."""
        whole = self.belt is None and "horizon" not in self.order.model_fields_set
        return MOST_ON_TRAY if whole else self.order.horizon

    @property
    def surface_mm(self) -> float:
        """Height of what the parts lie on: the belt's surface, or the tray's."""
        return self.tray.surface_mm if self.belt is None else self.belt.surface_mm

    def beside(self, path: str) -> Path:
        """A path named in the cell file, resolved from that file's folder."""
        return self.file.parent / path

    def camera(self, name: str = "") -> CameraCell:
        """The camera of this name; the first one for an empty name, a default one where none is described."""
        if not name:
            return self.cameras[0] if self.cameras else CameraCell()
        for camera in self.cameras:
            if camera.name == name:
                return camera
        raise InputFault(self.file, "cameras", f"no camera named {printable(name)!r}", "add it to [[cameras]]")

    @model_validator(mode="after")
    def _names(self) -> "Cell":
        for what, names in (("places", [p.name for p in self.places]), ("cameras", [c.name for c in self.cameras])):
            doubled = sorted({name for name in names if names.count(name) > 1})
            if doubled:
                raise ValueError(f"two {what} are named {printable(doubled[0])!r}: rename one")
        known = [place.name for place in self.places]
        for kind, part in self.parts.items():
            for place in part.places:
                if place not in known:
                    remedy = f"did you mean {_nearest(place, known)!r}?" if known else "add it to [[places]]"
                    raise ValueError(f"parts.{printable(kind)} goes to {printable(place)!r}, which is not a place: "
                                     + remedy)
        return self


def load_cell(path: str | Path) -> Cell:
    """Read and check a cell file. Raises CellError with one fault for each thing to mend."""
    path = Path(path)
    try:
        if path.stat().st_size > MOST_BYTES:
            raise CellError([InputFault(path, "", "larger than 4 MB", "give a cell file")])
        raw = tomllib.loads(path.read_text(encoding="utf-8-sig"))
    except FileNotFoundError:
        raise CellError([InputFault(path, "", "no such file", "check the path")]) from None
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError, RecursionError) as error:
        remedy = "give the cell file in it" if path.is_dir() else "correct the line: points in numbers, text in quotes"
        raise CellError([InputFault(path, "", f"not a TOML file ({printable(error)})", remedy)]) from None
    return cell_from(raw, path)


def cell_from(raw: dict[str, Any], path: str | Path = "cell.toml") -> Cell:
    """A cell from the tables of a cell file. Raises CellError naming `path` as the file."""
    path = Path(path)
    if "file" in raw:
        raise CellError([InputFault(path, "file", "unknown key", "remove it")])
    try:
        return Cell.model_validate({**raw, "file": path})
    except ValidationError as error:
        raise CellError(list(_faults(path, error))) from None


def _faults(path: Path, error: ValidationError) -> Iterator[InputFault]:
    """One InputFault for each of pydantic's complaints (an either-or key once)."""
    told = set()
    for one in error.errors():
        where = [str(step) for step in one["loc"] if not _is_branch(step)]
        place = ".".join(where)
        if place in told:
            continue
        told.add(place)
        kind, given = one["type"], printable(repr(one.get("input")), 60)
        if kind == "extra_forbidden":
            near = _nearest(where[-1], _keys(where[:-1]))
            yield InputFault(path, place, "unknown key", f"did you mean {near!r}?" if near else "remove it")
        elif kind == "missing":
            yield InputFault(path, place, "missing", "add it")
        elif kind == "value_error":
            fault, _, remedy = str(one["msg"]).removeprefix("Value error, ").partition(": ")
            yield InputFault(path, place, fault, remedy or "correct it")
        else:
            yield InputFault(path, place, f"{given} will not do", one["msg"][0].lower() + one["msg"][1:])


def _is_branch(step: int | str) -> bool:
    """Whether a step of a pydantic location names a branch of a union, not a key of the file."""
    branches = ("constrained-", "literal[", "function-")
    return isinstance(step, str) and (step.startswith(branches) or step in ("int", "float"))


def _keys(where: list[str]) -> list[str]:
    """The keys that the section of the cell file at this place may have."""
    model: type[Record] = Cell
    for before, step in zip(["", *where], where, strict=False):
        model = PartCell if before == "parts" else _SECTIONS.get(step, model)
    return [key for key in model.model_fields if key != "file"]


_SECTIONS: dict[str, type[Record]] = {
    "arm": ArmCell, "tool": ToolCell, "belt": BeltCell, "tray": TrayCell, "cameras": CameraCell, "places": PlaceCell,
    "keepouts": KeepoutCell, "motion": MotionCell, "order": OrderCell, "grips": GripCell,
    "j1": Joint, "j2": Joint, "j3": Joint, "j4": Joint,
}  # fmt: skip


def _nearest(name: str, known: list[str]) -> str:
    close = difflib.get_close_matches(name, known, n=1, cutoff=0.0)
    return close[0] if close else ""
