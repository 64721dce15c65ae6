"""The command line itself: help, and what it costs."""

import subprocess
import sys

import pytest
from some_streams import sanderling

COMMANDS = ["check", "calibrate lens", "calibrate plane", "calibrate belt", "teach", "find", "reach", "plan", "replay",
            "compare", "sweep", "score", "fit", "new", "export"]  # fmt: skip
HEAVY = ("numpy", "cv2", "scipy", "numba", "matplotlib", "networkx", "ruckig", "pydantic")


@pytest.mark.parametrize("command", COMMANDS)
def test_every_command_tells_what_it_does_with_an_example(command: str) -> None:
    told = sanderling(*command.split(), "--help")
    assert told.status == 0
    assert "Usage" in told.out
    assert f"Example: sanderling {command} " in " ".join(told.out.split())


def test_help_loads_nothing_heavy() -> None:
    """Answering at once means importing inside the commands."""
    code = ("import sys\nsys.argv = ['sanderling', '--help']\nfrom pipeline.app import main\n"
            "try:\n    main()\nexcept SystemExit:\n    pass\n"
            f"print([name for name in {HEAVY!r} if name in sys.modules], file=sys.stderr)")
    ended = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert ended.stderr.strip() == "[]"


def test_an_unknown_command_is_wrong_input() -> None:
    assert sanderling("pick").status == 2
