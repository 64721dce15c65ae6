"""A part taught from several images: heights measured, not assumed."""

import numpy as np
import pytest
from scenes import HOLE, PLATE, Laid, Scene, disc
from some_arms import changed
from some_sightings import CELL, HEADING

from cameras.faults import InputFault
from cameras.find import PartFinder, TaughtPart
from cameras.teach import Taught, teach
from cameras.teach_views import TeachingView, teach_views
from pipeline.teaching import poses_when_seen, remarks

PLACES = ((-95.0, 55.0), (5.0, 0.0), (100.0, -60.0))
YAW = 0.6


def views(outline, height, turns=1, hole=None, level=170.0, places=PLACES):
    told = []
    for k, (x, y) in enumerate(places):
        pose = (x, y, YAW)
        scene = Scene([Laid(outline, pose, height, level, hole)], seed=k)
        told.append(TeachingView(scene.image(), scene.camera, Taught("part", height, turns, pose), f"{k}.png"))
    return told


@pytest.mark.parametrize(("outline", "turns"), [(PLATE, 1), (disc(12.0), 0)])
def test_heights_are_measured(outline, turns):
    """The drawn walls are straight: their edge is at the top."""
    given = views(outline, 25.0, turns)
    one, several = teach_views(given[:1], 0.0), teach_views(given, 0.0)
    assert abs(several.outline.height_mm - 25.0) < min(2.5, 0.5 * abs(one.outline.height_mm - 25.0))
    assert abs(several.outline.height_mm - 25.0) < 2.5 * several.outline.height_sigma_mm
    assert several.outline.height_sigma_mm < one.outline.height_sigma_mm


def test_a_part_is_found_where_it_is_far_from_where_it_was_taught():
    given = views(PLATE, 25.0, hole=HOLE)
    far = Scene([Laid(PLATE, (-90.0, -60.0, 2.0), 25.0, 170.0, HOLE)], seed=9)
    missed = []
    for model in (teach_views(given[1:2], 0.0), teach_views(given, 0.0)):
        seen = PartFinder([TaughtPart("part", model, 25.0, 1)], 0.0).find(far.image(), far.camera)
        assert len(seen) == 1
        missed.append(float(np.linalg.norm(seen.xy_mm[0] - [-90.0, -60.0])))
    assert missed[1] < 0.3
    assert missed[1] < 0.5 * missed[0]


def test_one_view_is_taught_as_ever():
    given = views(PLATE, 5.0)[0]
    assert teach_views([given], 0.0).as_json() == teach(given.grey, given.camera, 0.0, given.taught).as_json()


def test_a_view_that_cuts_the_part_is_named():
    given = views(PLATE, 5.0, places=((5.0, 0.0), (171.0, 0.0)))
    with pytest.raises(InputFault, match=r"1\.png"):
        teach_views(given, 0.0)


def test_each_image_has_its_counts():
    first, second = poses_when_seen(CELL, "100,50,30", [1000.0, 3000.0], 5000.0, 2)
    assert np.allclose(np.array(second[:2]) - first[:2], 2000 * 0.05 * HEADING)
    with pytest.raises(InputFault, match="one for each image"):
        poses_when_seen(CELL, "100,50,30", [1000.0], 5000.0, 2)


@pytest.mark.parametrize(("places", "warned"), [(PLACES, False), (((5.0, 0.0), (7.0, 1.0)), True)])
def test_images_that_measure_no_height_are_remarked_on(places, warned):
    model = teach_views(views(PLATE, 25.0, places=places), 0.0)
    assert any("hardly measure" in line for line in remarks(changed(), model, len(places))) == warned
    assert not any("hardly measure" in line for line in remarks(changed(), model))
