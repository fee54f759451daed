from __future__ import annotations

import numpy as np
import pytest
from sphere_points import globe, region, rotate

from twicetold.errors import GraphError
from twicetold.graph import regions, unit_vectors

CENTRES = [(0, 179), (60, 20), (-50, -90), (89, 0)]


def islands():
    parts = [region(n, n, 400, at) for n, at in zip([30, 20, 25, 15], CENTRES, strict=True)]
    return tuple(np.concatenate(x) for x in zip(*parts, strict=True))


@pytest.mark.parametrize("seed", [1, 2, 99])
@pytest.mark.parametrize("turn", [None, 4])
def test_far_islands_are_found_across_the_antimeridian_and_the_pole(seed, turn):
    lat, lon = islands() if turn is None else rotate(*islands(), turn)
    expected = np.repeat([0, 1, 2, 3], [30, 20, 25, 15])
    assert regions(lat, lon, 4, seed).tolist() == expected.tolist()


def test_every_point_is_nearest_its_own_centre():
    lat, lon = globe(500, 3)
    label = regions(lat, lon, 7, 1)
    assert np.unique(label).tolist() == list(range(7))
    xyz = unit_vectors(lat, lon)
    centres = np.array([xyz[label == r].sum(axis=0) for r in range(7)])
    centres /= np.linalg.norm(centres, axis=1, keepdims=True)
    assert (np.argmax(xyz @ centres.T, axis=1) == label).all()


def test_the_same_seed_gives_the_same_regions_as_int32():
    lat, lon = globe(300, 4)
    one = regions(lat, lon, 6, 5)
    assert one.dtype == np.int32
    assert one.tolist() == regions(lat, lon, 6, 5).tolist()
    assert one.tolist() != regions(lat, lon, 5, 5).tolist()


def test_fewer_places_than_regions():
    assert regions([0, 9, 0, 0], [5, 5, 5, 6], 4, 1).tolist() == [0, 1, 0, 2]
    assert regions([], [], 4, 1).tolist() == []
    assert regions([3, 4], [3, 4], 1, 1).tolist() == [0, 0]


def test_repeated_points_stay_together():
    lat, lon = globe(40, 6)
    label = regions(np.r_[lat, lat], np.r_[lon, lon], 5, 1)
    assert label[:40].tolist() == label[40:].tolist()
    assert len(np.unique(label)) == 5


@pytest.mark.parametrize("k", [0, -1, 2.0, True, "3"])
def test_bad_number_of_regions(k):
    with pytest.raises(GraphError, match="`k` must be a whole number of regions"):
        regions([0, 1], [0, 1], k, 1)
