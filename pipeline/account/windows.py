"""When each part could have been gripped: from known to gone."""

from dataclasses import dataclass

import numpy as np

from pipeline.replay import Setting
from pipeline.watch import Watch


@dataclass(frozen=True)
class PartWindow:
    """known_s: when the controller knows of the part. enters_s, leaves_s: of the pick window (inf: never)."""

    known_s: float
    enters_s: float
    leaves_s: float


def windows_of(setting: Setting) -> list[PartWindow]:
    """One for each part, in their order; on a tray from the image to the next one."""
    watch = Watch(setting.cell, setting.recording, setting.belt, setting.parts)
    belt = setting.cell.belt
    told = []
    for k, part in enumerate(setting.parts):
        known = float(watch.first_s[k])
        if belt is None:
            told.append(PartWindow(known, float(setting.recording.times_s[part.first_row]), float(watch.until_s[k])))
        elif belt.window_mm is None:
            told.append(PartWindow(known, known, np.inf))
        else:
            enters, leaves = (setting.belt.when(edge - float(watch.along_mm[k])) for edge in belt.window_mm)
            told.append(PartWindow(known, enters, leaves))
    return told
