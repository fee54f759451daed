"""Maps: equal areas, data in sight, nothing torn at the antimeridian, land filled on its inside."""

from __future__ import annotations

import dataclasses
import json

import factory
import numpy as np
import pytest

from twicetold.plan import Plan
from twicetold.report.geography import fit_view, land_features
from twicetold.report.maps import Atlas


def places(seed, n=60, spread=6.0, lat=-12.0, lon=178.0):
    rng = np.random.default_rng(seed)
    return (lon + rng.normal(0, spread, n) + 180) % 360 - 180, lat + rng.normal(0, spread, n)


def area_factors(view, lon, lat, h=1e-4):
    """Determinant of the projection per unit of area on the sphere, by central differences."""
    x1, y1 = view.project(lon + h, lat)
    x0, y0 = view.project(lon - h, lat)
    x3, y3 = view.project(lon, lat + h)
    x2, y2 = view.project(lon, lat - h)
    step = 2 * np.radians(h)
    det = ((x1 - x0) * (y3 - y2) - (x3 - x2) * (y1 - y0)) / step**2
    return det / np.cos(np.radians(lat))


def test_both_projections_keep_areas():
    lon, lat = places(1)
    local = fit_view(lon, lat)
    assert local.kind == "azimuthalEqualArea"
    assert area_factors(local, lon, lat) == pytest.approx(1, abs=1e-5)
    rng = np.random.default_rng(2)
    wide_lon, wide_lat = rng.uniform(-170, 170, 200), rng.uniform(-70, 70, 200)
    world = fit_view(wide_lon, wide_lat)
    assert world.kind == "equalEarth"
    factors = area_factors(world, wide_lon, wide_lat)
    # Equal Earth's polynomial keeps areas up to one common factor (Savric et al. 2019).
    assert factors == pytest.approx(factors.mean(), rel=1e-5)


@pytest.mark.parametrize("seed", range(6))
@pytest.mark.parametrize("lon", [178.0, -75.0, 20.0])
def test_every_place_lies_in_the_picture_and_near_ones_stay_near(seed, lon):
    x, y = places(seed, lon=lon, lat=[-50, 0, 70][seed % 3])
    view = fit_view(x, np.clip(y, -89, 89))
    px, py = view.project(x, np.clip(y, -89, 89))
    across = 0.5 + view.scale * (px - view.centre[0])
    up = view.aspect / 2 + view.scale * (py - view.centre[1])
    assert across.min() >= 0
    assert across.max() <= 1
    assert up.min() >= 0
    assert up.max() <= view.aspect + 1e-9


def test_an_archipelago_across_the_antimeridian_is_not_torn():
    view = fit_view(np.array([179.5, -179.5]), np.array([-10.0, -10.0]))
    x, _ = view.project(np.array([179.5, -179.5]), np.array([-10.0, -10.0]))
    # One degree at 10 degrees south on a sphere of radius 1.
    assert abs(x[1] - x[0]) == pytest.approx(np.radians(1) * np.cos(np.radians(10)), rel=1e-3)


def test_a_world_map_is_cut_where_nobody_lives():
    lon = np.concatenate([np.linspace(20, 180, 50), np.linspace(-180, -60, 40)])
    view = fit_view(lon, np.zeros_like(lon))
    cut = (-view.rotate[0] + 180) % 360
    assert 300 < cut < 380  # between 60 west and 20 east


def test_one_place_and_no_place_give_a_map():
    assert fit_view(np.array([5.0]), np.array([50.0])).scale > 0
    assert fit_view(np.array([]), np.array([])).kind == "equalEarth"


def test_natural_earth_land_is_there_and_closed():
    rings = [r for f in land_features(None) for r in f["geometry"]["coordinates"]]
    assert len(rings) > 100
    assert all(r[0] == r[-1] and len(r) >= 4 for r in rings)


def test_own_land_is_drawn_whichever_way_its_rings_are_wound(tmp_path):
    square = [[170, -10], [175, -10], [175, -5], [170, -5], [170, -10]]
    across = [[179, 0], [-179, 0], [-179, 2], [179, 2], [179, 0]]
    found = []
    for rings in ([square, across], [square[::-1], across[::-1]]):
        path = tmp_path / "land.geojson"
        shapes = [{"type": "Polygon", "coordinates": [r]} for r in rings]
        path.write_text(json.dumps({"type": "GeometryCollection", "geometries": shapes}))
        found.append(land_features(path))
    assert found[0] == found[1]
    # Clockwise seen from above: what the drawing library takes for the inside.
    lon = np.unwrap([p[0] for p in found[0][1]["geometry"]["coordinates"][0]], period=360)
    lat = [p[1] for p in found[0][1]["geometry"]["coordinates"][0]]
    assert sum(lon[k] * lat[k + 1] - lon[k + 1] * lat[k] for k in range(4)) < 0


def test_the_demonstration_is_drawn_on_its_own_land(example_folder):
    from twicetold.catalogue import read_catalogue
    from twicetold.graph import contact_graph

    catalogue = read_catalogue(example_folder)
    atlas = Atlas(catalogue, contact_graph(catalogue, "nearest:6"), Plan())
    assert 1 <= len(atlas.land) < 100
    assert atlas.land != land_features(None)
    assert atlas.view.kind == "azimuthalEqualArea"


def test_places_are_drawn_no_finer_than_the_plan_says():
    catalogue = factory.make_catalogue(200, 5)
    graph = factory.make_graph(catalogue)
    atlas = Atlas(catalogue, graph, Plan().replace(report__round_degrees=2.0))
    off = np.hypot(
        (atlas.lon - catalogue.longitude + 180) % 360 - 180, atlas.lat - catalogue.latitude
    )
    assert off.max() <= np.hypot(1, 1) + 0.6
    # What is drawn follows from the rounded place and the order of ids, never from the place.
    moved = dataclasses.replace(
        catalogue,
        longitude=factory.frozen(2 * np.round(catalogue.longitude / 2)),
        latitude=factory.frozen(2 * np.round(catalogue.latitude / 2)),
    )
    again = Atlas(moved, graph, Plan().replace(report__round_degrees=2.0))
    assert again.traditions == atlas.traditions
    assert len({(t["lon"], t["lat"]) for t in atlas.traditions}) == len(atlas.traditions)
    exact = Atlas(catalogue, graph, Plan().replace(report__round_degrees=0.0))
    assert np.abs(exact.lat - catalogue.latitude).max() <= 5e-5
