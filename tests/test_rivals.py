import cv2
import numpy as np
import pytest
from scenes import disc

from cameras.blobs import blobs_of
from cameras.edges import edge_map
from cameras.rivals import best

MIDDLE = np.array([200.0, 160.0])


def patch(outline: np.ndarray) -> np.ndarray:
    """A light thing on a dark belt."""
    image = np.full((320, 400), 60, np.uint8)
    cv2.fillPoly(image, [np.round(outline).astype(np.int32)], 170)
    return image


@pytest.mark.parametrize(
    ("lies", "small", "large", "kept"),
    [
        (60.0, 0.90, 0.80, 1),  # the larger one explains all of the patch, and is nearly as good
        (60.0, 0.90, 0.60, 0),  # it is much less good
        (48.0, 0.90, 0.85, 0),  # it would lie half on bare belt
        (60.0, 0.80, 0.90, 1),
    ],
)
def test_a_rival_that_explains_more_is_taken_if_nearly_as_good(lies, small, large, kept):
    blobs = blobs_of(edge_map(patch(disc(lies) + MIDDLE)))
    assert best(blobs, [(small, disc(48.0) + MIDDLE), (large, disc(60.0) + MIDDLE)]) == [kept]


def test_two_that_touch_are_both_kept_and_a_third_over_both_is_not():
    left, right = disc(40.0) + MIDDLE - [41.0, 0.0], disc(40.0) + MIDDLE + [41.0, 0.0]
    blobs = blobs_of(edge_map(np.maximum(patch(left), patch(right))))
    over = disc(82.0) + MIDDLE
    assert sorted(best(blobs, [(0.9, left), (0.95, right), (0.85, over)])) == [0, 1]
