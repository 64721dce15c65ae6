"""The map's share of how unsure parts are: what their sightings cannot tell, since all of them came through one map."""

from collections.abc import Mapping
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from cameras.camera import CameraMap
from cameras.recording import Recording
from cameras.sightings import Sightings
from pipeline.cell import Cell
from pipeline.follow import Followed

FloatArray = NDArray[np.float64]


def with_map_share(followed: Followed, sightings: Sightings, recording: Recording, cameras: Mapping[str, CameraMap],
                   cell: Cell) -> Followed:
    """The parts with sigmas that are of finding and map: sqrt(finding^2 + map^2).

    A map's error at neighbouring places is much the same, so sightings do not average it out: the share is the mean of
    its variance over the places where the part was seen, at the height of its top face.
    """
    variance = np.zeros((len(sightings), 2))  # mm^2, rad^2
    heights = np.array([cell.surface_mm + (cell.parts[kind].height_mm if kind in cell.parts else 0.0)
                        for kind in sightings.kind.tolist()])
    of_camera = recording.cameras[sightings.row]
    for name, camera in cameras.items():
        own = np.flatnonzero(of_camera == name)
        if len(own):
            points = np.column_stack([sightings.xy_mm[own], heights[own]])
            variance[own] = np.column_stack([camera.sigma_mm(points) ** 2, camera.yaw_sigma_rad(points) ** 2])
    used = np.flatnonzero((followed.part_of >= 0) & np.isfinite(variance).all(axis=1))
    part, many = followed.part_of[used], len(followed.parts)
    seen = np.maximum(np.bincount(part, minlength=many), 1)
    mm2, rad2 = (np.bincount(part, column[used], many) / seen for column in variance.T)
    parts = tuple(replace(one, sigma_mm=float(np.hypot(one.sigma_mm, mm2[k] ** 0.5)),
                          sigma_rad=float(np.hypot(one.sigma_rad, rad2[k] ** 0.5)))
                  for k, one in enumerate(followed.parts))
    return replace(followed, parts=parts)
