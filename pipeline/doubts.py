"""What a recording makes one doubt of its counts and of the belt's direction, in sentences."""

import numpy as np

from pipeline.belt import Belt
from pipeline.study import Seen

FEWEST = 8  # parts that a doubt rests on
SEEN_TWICE = 2.0  # frames in which the camera sees each stretch of belt, from which parts must be seen again
ONCE = 0.7  # share of parts seen in one frame only that is too many then


def doubts_of(seen: Seen) -> list[str]:
    """Counts that never change, and parts that are not seen again where the belt should bring them."""
    counts = seen.recording.counts
    if seen.cell.belt is None or len(counts) < 2:
        return []
    if np.ptp(counts) == 0:
        return [f"the counts stay at {counts[0]:g} over all {len(counts)} frames: the belt is taken to stand still. If "
                "it moved, write its encoder's counts into frames.csv"]
    parts = seen.followed.parts
    if len(parts) < FEWEST:
        return []
    views, once = _views(seen), float(np.mean([part.frames_seen == 1 for part in parts]))
    if views < SEEN_TWICE or once < ONCE:
        return []
    return [f"{once:.0%} of the parts were seen in one frame only, though every stretch of belt is in view in about "
            f"{views:.0f}: recheck heading_deg, mm_per_count and that counts rise as the belt moves"]


def _views(seen: Seen) -> float:
    """In how many frames a stretch of belt is in view: the length things are seen over, by what it moves a frame."""
    belt = Belt(seen.recording.times_s, seen.recording.counts, seen.cell.belt)
    along = seen.sightings.xy_mm @ belt.heading
    step = float(np.median(np.abs(np.diff(belt.recorded_mm))))
    return float(np.subtract(*np.percentile(along, [95, 5]))) / max(step, 1e-9) if len(along) else 0.0
