"""Parts that had no room for one another: who waits for whom, and rings of them."""

import numpy as np

from pipeline.neighbours import ROOM_MM
from pipeline.remedy.trial import Trials
from pipeline.room import rings, who_blocks_whom


def rings_of(trials: Trials) -> dict[int, str]:
    """Of each part in a ring of parts that block one another, by its number: the sentence that names the ring.

    Looked at are the parts missed for want of room, among all that were missed: the others went at some time.
    """
    fates = trials.run.fates
    crowded = [k for k, fate in enumerate(fates) if fate is not None and fate.reason == "no_room"]
    left = np.array([k for k, fate in enumerate(fates) if fate is not None], np.int64)
    if len(crowded) < 2:
        return {}
    rooms, jaws, owners = [], [], []
    for k in crowded:
        own = np.isin(left, trials.around(k, trials.passed_s(k)))
        seen = trials.room(trials.set.cell, k, left[own])
        if seen is None:
            continue
        room, jaw = np.full((len(seen[1]), len(left)), np.inf), np.zeros((len(seen[1]), len(left)), np.int64)
        room[:, own], jaw[:, own] = seen[1:]
        rooms.append(room)
        jaws.append(jaw)
        owners += [k] * len(room)
    if not rooms:
        return {}
    graph = who_blocks_whom(np.concatenate(rooms), np.concatenate(jaws), owners, left.tolist(), ROOM_MM)
    told: dict[int, str] = {}
    for ring in rings(graph):
        numbers = [trials.set.parts[k].number for k in ring]
        named = f"{', '.join(map(str, numbers[:-1]))} and {numbers[-1]}"
        told |= dict.fromkeys(numbers, f"parts {named} block one another")
    return told
