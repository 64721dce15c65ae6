"""Outlines as they are drawn: few points, none far off."""

import cv2
import numpy as np
from numpy.typing import ArrayLike, NDArray


def thinned(outline: ArrayLike, within: float = 0.3) -> NDArray[np.float64]:
    """An outline (n, 2) with fewer points, none farther off than `within` (Douglas, Peucker, 1973)."""
    return np.asarray(cv2.approxPolyDP(np.asarray(outline, np.float32)[:, None], within, True)[:, 0], np.float64)
