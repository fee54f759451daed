"""The correlogram against brute force and enumeration."""

from itertools import combinations

import numpy as np
import pytest

from twicetold.errors import TwicetoldError
from twicetold.statistics import _kernels, _plain, correlogram, distance_classes
from twicetold.statistics.correlogram import EARTH_RADIUS_KM

EDGES = [0, 1000, 3000, 8000, 20100]


def places(n, seed=3):
    rng = np.random.default_rng(seed)
    return np.degrees(np.arcsin(rng.uniform(-1, 1, n))), rng.uniform(-180, 180, n)


def haversine(lat, lon, i, j):
    p, q = np.radians(lat[i]), np.radians(lat[j])
    h = np.sin((q - p) / 2) ** 2
    h += np.cos(p) * np.cos(q) * np.sin(np.radians(lon[j] - lon[i]) / 2) ** 2
    return 2 * EARTH_RADIUS_KM * np.arcsin(np.sqrt(h))


def test_counts_equal_haversine_pair_by_pair():
    lat, lon = places(60)
    surveyed = np.arange(60) % 5 != 0
    holders = [i for i in range(60) if surveyed[i] and i % 3 == 0]
    got = correlogram(lat, lon, holders, surveyed, EDGES)
    pairs, both = np.zeros(4, int), np.zeros(4, int)
    for i, j in combinations(np.flatnonzero(surveyed), 2):
        c = np.searchsorted(EDGES, haversine(lat, lon, i, j), side="right") - 1
        pairs[c] += 1
        both[c] += i in holders and j in holders
    assert got.classes.pairs.tolist() == pairs.tolist()
    assert got.both.tolist() == both.tolist()
    assert got.classes.pairs.sum() == surveyed.sum() * (surveyed.sum() - 1) // 2
    np.testing.assert_allclose(got.observed, both / pairs)


def test_expectation_and_sd_equal_enumeration():
    lat, lon = places(8)
    every = [correlogram(lat, lon, s, None, EDGES).observed for s in combinations(range(8), 3)]
    got = correlogram(lat, lon, [0, 1, 2], None, EDGES)
    full = got.classes.pairs > 0
    np.testing.assert_allclose(np.mean(every, axis=0)[full], got.expected[full])
    np.testing.assert_allclose(np.std(every, axis=0)[full], got.sd[full], atol=1e-12)


def test_kernel_equals_plain():
    rng = np.random.default_rng(0)
    xyz = rng.normal(size=(25, 3))
    xyz /= np.linalg.norm(xyz, axis=1)[:, None]
    rows, limits = np.arange(0, 25, 2, dtype=np.int32), np.array([0.1, 0.5, 2.0, np.inf])
    pairs, degree = np.zeros(3, np.int64), np.zeros((len(rows), 3), np.int64)
    _kernels.pair_classes(xyz, rows, limits, pairs, degree)
    plain_pairs, plain_degree = _plain.pair_classes(xyz, rows, limits)
    assert pairs.tolist() == plain_pairs
    assert degree.tolist() == plain_degree


def test_antimeridian_poles_and_antipodes_are_ordinary_places():
    lat, lon = [0.0, 0.0, 90.0, 90.0, 0.0], [179.9, -179.9, 0.0, 120.0, 0.1]
    got = distance_classes(lat, lon, None, [0, 30, 12000, 21000])
    # 0.2 degrees over the antimeridian, the pole with itself; the last is antipodal to 0/-179.9.
    assert got.pairs.tolist() == [2, 6, 2]


def test_shared_classes_and_read_only():
    lat, lon = places(20)
    classes = distance_classes(lat, lon, None, EDGES)
    one = correlogram(lat, lon, [1, 2, 3], None, EDGES, classes=classes)
    assert one.classes is classes
    assert one.both.tolist() == correlogram(lat, lon, [1, 2, 3], None, EDGES).both.tolist()
    assert not one.observed.flags.writeable


def test_nonsense_is_refused():
    lat, lon = places(5)
    with pytest.raises(TwicetoldError, match="increasing"):
        distance_classes(lat, lon, None, [0, 5, 5])
    with pytest.raises(TwicetoldError, match="surveyed"):
        correlogram(lat, lon, [0], np.arange(5) > 0, EDGES)
    with pytest.raises(TwicetoldError, match="equally long"):
        distance_classes(lat, lon[:3], None, EDGES)
    with pytest.raises(TwicetoldError, match="5 values"):
        distance_classes(lat, lon, [True], EDGES)
