from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from sphere_points import all_km, globe

from twicetold.errors import GraphError
from twicetold.graph import great_circle_km, round_coordinates, unit_vectors
from twicetold.graph.sphere import by_first_appearance, chord, place_labels

lats, lons = st.floats(-90, 90), st.floats(-180, 180)


@given(lats, lons, lats, lons)
def test_distance_is_symmetric_and_agrees_with_the_angle_between_vectors(a, b, c, d):
    km = great_circle_km(a, b, c, d)
    assert km == great_circle_km(c, d, a, b)
    u, v = unit_vectors([a, c], [b, d])
    angle = np.arctan2(np.linalg.norm(np.cross(u, v)), u @ v)
    assert km == pytest.approx(6371.0088 * angle, rel=1e-12, abs=1e-9)


def test_nothing_cancels_next_door_or_at_the_antipode():
    # One ten-millionth of a degree is 11.1 mm everywhere, also when measured from the antipode.
    small = 111.195080 * 1e-7
    assert great_circle_km(45, 10, 45 + 1e-7, 10) == pytest.approx(small, rel=1e-6)
    whole = great_circle_km(0, 0, 0, 180)
    assert whole - great_circle_km(45, 10, -45 + 1e-7, -170) == pytest.approx(small, rel=1e-4)


def test_antimeridian_and_poles_are_ordinary():
    assert great_circle_km(10, 180, 10, -180) == 0
    assert great_circle_km(0, 179.5, 0, -179.5) == pytest.approx(111.195080, abs=1e-6)
    assert great_circle_km(90, 17, 90, -120) == pytest.approx(0, abs=1e-9)
    assert great_circle_km(89, 0, 89, 180) == pytest.approx(2 * 111.195080, abs=1e-5)


def test_chord_grows_with_distance_up_to_the_antipode():
    km = np.linspace(0, 20015.1, 500)
    assert (np.diff([chord(x) for x in km]) >= 0).all()
    assert chord(10007.557221) == pytest.approx(np.sqrt(2), abs=1e-9)
    assert chord(1e9) == 2


def test_places_within_a_metre_are_one_and_numbered_by_first_appearance():
    metre = 1 / 111195.08
    lat = [10, -5, 10 + 0.5 * metre, -5 + 3 * metre, 90, 90, 10]
    lon = [180, 3, -180, 3, 12, -70, 180]
    assert place_labels(unit_vectors(lat, lon)).tolist() == [0, 1, 0, 2, 3, 3, 0]
    assert place_labels(np.zeros((0, 3))).tolist() == []


def test_labels_by_first_appearance():
    assert by_first_appearance(np.array([7, 2, 7, 9, 2])).tolist() == [0, 1, 0, 2, 1]


@given(st.lists(st.tuples(lats, lons), min_size=1), st.sampled_from([0.1, 0.25, 0.3, 1, 5, 7]))
def test_rounding_moves_no_coordinate_more_than_half_a_step_and_is_idempotent(points, step):
    lat, lon = np.array(points).T
    a, b = round_coordinates(lat, lon, step)
    # At the edges a multiple of the step may lie beyond ±90 or ±180, and is held there.
    assert (np.abs(a - lat) <= step / 2 + 1e-9).all()
    assert (np.abs(b - lon) <= step / 2 + 1e-9).all()
    assert (np.abs(a) <= 90).all()
    assert (np.abs(b) <= 180).all()
    inside = (np.abs(a) < 90) & (np.abs(b) < 180)
    again = round_coordinates(a, b, step)
    assert (again[0] == a)[inside].all()
    assert (again[1] == b)[inside].all()


def test_rounding_leaves_no_dust_and_touches_nothing_of_the_caller():
    lat = np.array([0.31, -0.04])
    a, _ = round_coordinates(lat, [0, 0], 0.1)
    assert a.tolist() == [0.3, 0.0]
    assert not np.signbit(a[1])
    assert lat.tolist() == [0.31, -0.04]
    same, _ = round_coordinates(lat, [0, 0], 0)
    assert same.tolist() == lat.tolist()
    assert same is not lat


@pytest.mark.parametrize("step", [-1, 91, float("nan")])
def test_rounding_refuses_other_steps(step):
    with pytest.raises(GraphError, match="`degrees` must be"):
        round_coordinates([0], [0], step)


def test_triangle_inequality():
    km = all_km(*globe(25, 4))
    assert (km[:, None, :] <= km[:, :, None] + km[None, :, :] + 1e-9).all()
