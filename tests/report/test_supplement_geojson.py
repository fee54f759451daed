"""GeoJSON by RFC 7946: order and range of coordinates, cuts at the antimeridian, great circles."""

from __future__ import annotations

import itertools
import json
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import deposits
from twicetold.graph import great_circle_km
from twicetold.report.supplement.geojson import cut, great_circle

LON = st.floats(-180, 180).map(lambda x: round(x, 3))
LAT = st.floats(-89.5, 89.5).map(lambda x: round(x, 3))


def loaded(name):
    return json.loads((deposits.deposit() / name).read_text(encoding="utf-8"))


def lines_of(feature):
    shape = feature["geometry"]
    several = shape["type"] == "MultiLineString"
    return shape["coordinates"] if several else [shape["coordinates"]]


def test_traditions_are_points_in_range_longitude_first():
    found = loaded("traditions.geojson")
    assert found["type"] == "FeatureCollection"
    assert "crs" not in found  # section 4: WGS 84 always, and nothing says so
    assert len(found["features"]) == deposits.N
    for feature in found["features"]:
        lon, lat = feature["geometry"]["coordinates"]
        assert -180 <= lon <= 180
        assert -60 <= lat <= -40
        assert feature["properties"]["tradition_id"]


def test_contacts_never_cross_the_antimeridian_and_some_are_cut():
    features = loaded("contacts.geojson")["features"]
    cuts = 0
    for feature in features:
        lines = lines_of(feature)
        cuts += len(lines) > 1
        for line in lines:
            assert len(line) >= 2
            for (x0, y0), (x1, y1) in itertools.pairwise(line):
                assert abs(x0 - x1) < 180
                assert max(abs(x0), abs(x1)) <= 180
                assert max(abs(y0), abs(y1)) <= 90
        for first, second in itertools.pairwise(lines):
            assert {abs(first[-1][0]), abs(second[0][0])} == {180}
            assert first[-1][0] == -second[0][0]
            assert first[-1][1] == second[0][1]
    assert 0 < cuts < len(features)


@given(LON, LAT, LON, LAT)
def test_a_cut_line_is_as_long_as_the_great_circle(x0, y0, x1, y1):
    km = float(great_circle_km(np.array([y0]), np.array([x0]), np.array([y1]), np.array([x1]))[0])
    if not 1 < km < 19_900:
        return
    lines = cut(great_circle((x0, y0), (x1, y1)))
    total = 0.0
    for line in lines:
        for (a, b), (c, d) in itertools.pairwise(line):
            assert min(a, c) >= -180
            assert max(a, c) <= 180
            total += float(
                great_circle_km(np.array([b]), np.array([a]), np.array([d]), np.array([c]))[0]
            )
    # A cut lies on the chord in longitude and latitude, at most a stride from the great circle.
    assert total == pytest.approx(km, rel=0.02, abs=2)
    ends = (lines[0][0], lines[-1][-1])
    for (a, b), (x, y) in zip(ends, ((x0, y0), (x1, y1)), strict=True):
        assert abs(math.remainder(a - x, 360)) < 1e-5
        assert b == pytest.approx(y, abs=1e-5)


def test_lines_that_end_on_the_antimeridian_or_run_along_it_are_whole():
    assert cut([(170.0, 0.0), (180.0, 1.0)]) == [[(170.0, 0.0), (180.0, 1.0)]]
    assert cut([(-170.0, 0.0), (-180.0, 1.0)]) == [[(-170.0, 0.0), (-180.0, 1.0)]]
    assert len(cut([(180.0, 0.0), (180.0, 1.0)])) == 1
    # A point between that stands right on it: cut there, once.
    assert cut([(170.0, 0.0), (180.0, 0.0), (190.0, 0.0)]) == [
        [(170.0, 0.0), (180.0, 0.0)],
        [(-180.0, 0.0), (-170.0, 0.0)],
    ]
