"""The command line, and nothing else: options in, exit status out.

Heavy imports stand inside the commands, so that `--help` answers at once.
"""

import os
import sys

import typer

from pipeline.app import arm, calibrate, cell, desk, find, replay, score, sweep

app = typer.Typer(
    name="sanderling",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)


@app.callback()
def _root() -> None:
    """Replay a recording of a conveyor pick cell offline: what can be gripped, in which order, how many a minute.

    Start with `sanderling new FOLDER`; every command's --help has an example.
    """


for module in (cell, calibrate, find, arm, replay, score, desk, sweep):
    module.register(app)


def main() -> None:
    """Run the command line. Exit status: 0 done, 1 a check failed, 2 wrong input, 130 interrupted."""
    from cameras.faults import InputFault, InputFaults

    try:
        app()
    except (InputFault, InputFaults) as faults:
        print(faults, file=sys.stderr)
        sys.exit(2)
    except KeyboardInterrupt:
        print("interrupted", file=sys.stderr)
        sys.exit(130)
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        sys.exit(0)
