"""Motion under speed, acceleration and jerk limits: curve -> lift -> across -> cycle."""

from pipeline.move_time import move_time

__all__ = ["move_time"]
