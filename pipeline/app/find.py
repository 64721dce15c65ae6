"""Commands: see `register`."""

import typer


def register(app: typer.Typer) -> None:
    """Add this module's commands."""
