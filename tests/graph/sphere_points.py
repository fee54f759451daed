"""Points on the sphere for the tests, and slow definitions to hold the fast ones against."""

from __future__ import annotations

import itertools

import numpy as np
import scipy.sparse as sp
from scipy.spatial.transform import Rotation

from twicetold.catalogue import Catalogue
from twicetold.graph import great_circle_km, unit_vectors


def to_degrees(xyz):
    xyz = xyz / np.linalg.norm(xyz, axis=-1, keepdims=True)
    return (
        np.degrees(np.arctan2(xyz[..., 2], np.hypot(xyz[..., 0], xyz[..., 1]))),
        np.degrees(np.arctan2(xyz[..., 1], xyz[..., 0])),
    )


def globe(n, seed):
    """Uniform points over the globe."""
    return to_degrees(np.random.default_rng(seed).normal(size=(n, 3)))


def region(n, seed, km, middle=(20.0, 179.9)):
    """Uniform points in a disc of radius ``km``, across the antimeridian by default."""
    rng = np.random.default_rng(seed)
    up = unit_vectors([middle[0]], [middle[1]])[0]
    east = np.cross(up, [0, 0, 1.0])
    east /= np.linalg.norm(east)
    radius, turn = km / 6371.0088 * np.sqrt(rng.random(n)), rng.random(n) * 2 * np.pi
    flat = np.outer(radius * np.cos(turn), east) + np.outer(
        radius * np.sin(turn), np.cross(up, east)
    )
    return to_degrees(up + flat)


def rotate(lat, lon, seed):
    return to_degrees(Rotation.random(random_state=seed).apply(unit_vectors(lat, lon)))


def all_km(lat, lon):
    lat, lon = np.asarray(lat, float), np.asarray(lon, float)
    return great_circle_km(lat[:, None], lon[:, None], lat[None], lon[None])


def pairs_of(graph):
    return {tuple(e) for e in graph.edges.tolist()}


def slow_nearest(lat, lon, k):
    km = np.rint(all_km(lat, lon) * 1e6)
    out = set()
    for i in range(len(lat)):
        order = sorted((j for j in range(len(lat)) if j != i), key=lambda j: (km[i, j], j))
        out |= {tuple(sorted((i, j))) for j in order[:k]}
    return out


def slow_delaunay(lat, lon):
    """Edges of triangles that cut off an empty cap smaller than a hemisphere (general position)."""
    xyz = unit_vectors(lat, lon)
    out = set()
    for t in itertools.combinations(range(len(xyz)), 3):
        a, b, c = xyz[list(t)]
        normal = np.cross(b - a, c - a)
        normal /= np.linalg.norm(normal)
        side = np.delete(xyz @ normal - a @ normal, t)
        for sign in (1, -1):
            if (sign * side < 0).all() and sign * (a @ normal) > 0:
                out |= set(itertools.combinations(t, 2))
    return out


def slow_gabriel(lat, lon):
    """Pairs with no third point in the cap whose diameter they are."""
    xyz = unit_vectors(lat, lon)
    out = set()
    for i, j in itertools.combinations(range(len(xyz)), 2):
        middle = xyz[i] + xyz[j]
        others = np.delete(xyz, [i, j], axis=0)
        if (others @ middle < xyz[i] @ middle).all():
            out.add((i, j))
    return out


def invented_catalogue(lat, lon, ids=None, **more):
    n = len(lat)
    ids = tuple(ids or (f"T{i:05d}" for i in range(n)))
    blank = ("",) * n
    return Catalogue(
        title="invented",
        notice="",
        tradition_ids=ids,
        tradition_names=ids,
        latitude=np.asarray(lat, float),
        longitude=np.asarray(lon, float),
        family=blank,
        branch=blank,
        region=blank,
        effort=None,
        covariates={},
        access=("open",) * n,
        motif_ids=(),
        motif_names=(),
        motif_categories=(),
        motif_access=(),
        attested=sp.csr_array((0, n), dtype=bool),
        surveyed_sets=(),
        surveyed_of=np.zeros(0, np.int32),
        not_applicable=sp.csr_array((0, n), dtype=bool),
        **more,
    )
