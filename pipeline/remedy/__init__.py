"""Remedies: which one number of the cell, had it been another, would have saved a part that was missed.

Stages, in order: `trial` (would this part have been picked in a changed cell), `least` (the least change that does),
`near` (the changes that each reason suggests, told in a sentence), `remedies` (all missed parts of a run).
"""

from pipeline.remedy.remedies import remedies, with_remedies

__all__ = ["remedies", "with_remedies"]
