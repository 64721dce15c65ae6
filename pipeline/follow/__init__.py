"""Following: sightings of several frames become parts, each listed once.

Stages, in order: `associate` (which sightings are of one thing), `estimate` (what was known of it after each of them),
`overlap` (which things are but mistaken views of others), `level` (how high the edges of each kind really are),
`drift` (what the sightings of one thing still disagree by, and what to recheck), `follow` (all of them).
"""

from pipeline.follow.drift import Drift
from pipeline.follow.follow import Followed, follow
from pipeline.follow.part import Known, Part

__all__ = ["Drift", "Followed", "Known", "Part", "follow"]
