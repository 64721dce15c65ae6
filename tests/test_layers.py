"""Data flows one way: every module imports only from rows above its own, and cameras/ never from pipeline/."""

import ast
from pathlib import Path

import networkx as nx

ROOT = Path(__file__).parents[1]

# In the order of the flow. A package stands for all its modules, which may import one another, but not in a circle.
LAYERS = """
cameras
cameras.faults cameras.confidence cameras.homography cameras.symmetry
cameras.written cameras.columns cameras.jsonfile cameras.image
cameras.video
cameras.recording cameras.boards cameras.touches
cameras.lens cameras.coverage
cameras.lens_fit cameras.camera
cameras.plane_start cameras.field
cameras.plane
cameras.plane_checks cameras.uncertainty
cameras.edges cameras.outline cameras.model cameras.view cameras.sightings
cameras.blobs cameras.search cameras.resized
cameras.chain cameras.rivals
cameras.teach cameras.match
cameras.find cameras.locate cameras.teach_views
pipeline
pipeline.cell pipeline.shapes
pipeline.arm pipeline.belt pipeline.belt_scale pipeline.places
pipeline.move_time pipeline.room
pipeline.finding pipeline.teaching pipeline.follow
pipeline.motion
pipeline.grasp pipeline.legs pipeline.map_share
pipeline.neighbours
pipeline.order pipeline.permit pipeline.watch pipeline.tray_steps pipeline.trip_order
pipeline.tray_order pipeline.candidate
pipeline.policy
pipeline.trays
pipeline.scene pipeline.trip
pipeline.tray_trips
pipeline.replay
pipeline.trajectory pipeline.study pipeline.remedy
pipeline.fit pipeline.trade_cycle pipeline.reach pipeline.score pipeline.budget
pipeline.sighted pipeline.doubts pipeline.reach_plot pipeline.reach_suggest pipeline.reach_picks pipeline.error_plot
pipeline.account pipeline.check pipeline.tables pipeline.decision
pipeline.plan_graph pipeline.page pipeline.plots pipeline.whole_tray
pipeline.outputs pipeline.compare pipeline.sweep pipeline.export pipeline.new_cell
pipeline.app
"""

ROW_OF = {unit: row for row, line in enumerate(LAYERS.split("\n")) for unit in line.split()}


def modules() -> dict[str, Path]:
    """Every module of both packages by name."""
    files = [path for package in ("cameras", "pipeline") for path in (ROOT / package).rglob("*.py")]
    return {".".join(path.relative_to(ROOT).with_suffix("").parts).removesuffix(".__init__"): path for path in files}


def imports(path: Path, known: dict[str, Path]) -> set[str]:
    """The modules of ours that a file imports, anywhere in it."""
    found = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: a relative import"
            inside = [f"{node.module}.{alias.name}" for alias in node.names]
            found |= {name if name in known else str(node.module) for name in inside}
        elif isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
    return found & set(known)


def unit_of(module: str) -> str:
    """The entry of the table a module belongs to: itself or the package it lies in."""
    parts = module.split(".")
    whole = [".".join(parts[:n]) for n in range(len(parts), 1, -1)] or [module]
    return next((name for name in whole if name in ROW_OF), module)


def test_every_module_has_its_layer() -> None:
    units = {unit_of(module) for module in modules()}
    assert sorted(units - set(ROW_OF)) == []
    assert sorted(set(ROW_OF) - units) == []


def test_modules_import_only_upstream() -> None:
    known = modules()
    upward = [f"{module} imports {other}" for module, path in known.items() for other in imports(path, known)
              if unit_of(other) != unit_of(module)
              and ROW_OF.get(unit_of(other), -1) >= ROW_OF.get(unit_of(module), len(ROW_OF))]
    assert upward == []


def test_nothing_imports_in_a_circle() -> None:
    known = modules()
    graph = nx.DiGraph((module, other) for module, path in known.items() for other in imports(path, known))
    graph.remove_edges_from(list(nx.selfloop_edges(graph)))
    assert list(nx.simple_cycles(graph)) == []


def test_cameras_never_import_pipeline() -> None:
    known = modules()
    assert [name for name, path in known.items() if name.startswith("cameras")
            and any(other.startswith("pipeline") for other in imports(path, known))] == []


def test_an_upward_import_would_be_seen(tmp_path: Path) -> None:
    """Also inside a function, and as a plain import."""
    file = tmp_path / "early.py"
    file.write_text("import pipeline.replay\ndef f():\n    from pipeline.app import shown\n")
    assert imports(file, modules()) == {"pipeline.replay", "pipeline.app.shown"}
    assert ROW_OF[unit_of("pipeline.app.shown")] > ROW_OF["pipeline.replay"] > ROW_OF["cameras.faults"]
