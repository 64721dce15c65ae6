"""Comparing: one recording under several orders and several cells.

Stages, in order: `runs` (what is tried, each thing found once), `tables` (compare.csv), `plots`, `page` (all side by
side).
"""

from pipeline.compare.runs import Tried, compare

__all__ = ["Tried", "compare"]
