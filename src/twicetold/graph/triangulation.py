"""Delaunay and Gabriel neighbours on the sphere.

The Delaunay triangulation of points on a sphere is their convex hull in space (Brown 1979): each
face cuts off a cap with no point in it. Two places are Delaunay neighbours here when their
Voronoi cells share a border of positive length, which settles the degenerate cases without an
order of the points: a diagonal between four points on one circle (every cell of a regular grid)
is left out, and points that all lie on one circle are joined along it.

**The outside.** On a map that covers less than the globe, the hull also has faces round the back
of the data, whose empty cap is a hemisphere or more. They lie outside the data's spherical convex
hull (a spherical region has an inside only up to a hemisphere), and an edge with such faces on
both sides is dropped. Edges of the convex hull itself stay, as in the plane. The graph of places
stays connected, and loses neither a Gabriel edge nor an edge of the minimum spanning tree, whose
own caps are smaller than a hemisphere.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import ConvexHull, QhullError, cKDTree

from twicetold.errors import GraphError
from twicetold.graph.sphere import FloatArray

Pairs = npt.NDArray[np.int64]

_RELATIVE = 1e-9  # points this close to one circle, relative to their spread, are on it
_DUST = 1e-15  # a few rounding errors of a unit vector


@dataclass(frozen=True)
class Triangulation:
    """Edges of the hull of distinct points on the sphere.

    Parameters
    ----------
    edges : (E, 2) int64
        Delaunay neighbours, i < j, sorted.
    candidates : (C, 2) int64
        Every edge of the hull, the outside and arbitrary diagonals included: a superset of the
        minimum spanning tree.
    """

    edges: Pairs
    candidates: Pairs


def triangulate(xyz: FloatArray) -> Triangulation:
    """Triangulate distinct points on the sphere.

    Parameters
    ----------
    xyz : (M, 3) float64
        Unit vectors, no two of them at one place.

    Raises
    ------
    GraphError
        When the points are too close together for floating-point arithmetic.
    """
    m = len(xyz)
    if m < 3:
        edges = np.array([[0, 1]] if m == 2 else [], dtype=np.int64).reshape(-1, 2)
        return Triangulation(edges, edges)
    stretched, scale = _stretch(xyz)
    normal, flat = _plane(stretched, tolerance=max(1e-12, _DUST / scale))
    if m == 3 or flat:
        return _on_a_circle(xyz, stretched, normal)
    return _from_faces(xyz, _hull(stretched))


def gabriel(xyz: FloatArray, delaunay: Pairs) -> Pairs:
    """Delaunay neighbours whose own cap (the one with the edge as diameter) holds no third point.

    A third point on the rim of the cap parts them too. Gabriel & Sokal 1969, on the sphere.
    """
    if len(xyz) < 3:
        return delaunay
    middle = xyz[delaunay[:, 0]] + xyz[delaunay[:, 1]]
    size = np.linalg.norm(middle, axis=1, keepdims=True)
    # Antipodes have no one middle, and every third point lies in some cap between them.
    middle = np.divide(middle, size, out=np.zeros_like(middle), where=size > 1e-12)
    radius = np.linalg.norm(middle - xyz[delaunay[:, 0]], axis=1)
    third, _ = cKDTree(xyz).query(middle, k=[3])
    alone = (third[:, 0] > radius * (1 + _RELATIVE) + _DUST) & (size[:, 0] > 1e-12)
    return np.asarray(delaunay[alone])


def _stretch(xyz: FloatArray) -> tuple[FloatArray, float]:
    """Give an affine image of the points whose hull has the same faces, but is not thin.

    A region of radius θ bulges only by θ²/2; seen from above its middle, with the horizontal
    divided by θ and the drop by θ², it is a dome as high as it is wide, whatever its size.
    """
    mean = xyz.mean(axis=0)
    up = mean / max(float(np.linalg.norm(mean)), 1e-300)
    if np.linalg.norm(mean) < 0.5 or (xyz @ up).min() < 0.8:
        return xyz, 1.0
    east = np.cross(up, np.eye(3)[np.argmin(np.abs(up))])
    east /= np.linalg.norm(east)
    flat = xyz @ np.stack([east, np.cross(up, east)], axis=1)
    squared = (flat**2).sum(axis=1)
    scale = float(np.sqrt(squared.max()))
    drop = squared / (1 + np.sqrt(1 - squared))  # 1 - cos, without cancellation
    return np.column_stack([flat / scale, -drop / scale**2]), scale


def _plane(points: FloatArray, *, tolerance: float) -> tuple[FloatArray, bool]:
    """Normal of the best plane through points, and whether they all lie on it."""
    centred = points - points.mean(axis=0)
    normal = np.linalg.svd(centred, full_matrices=False)[2][-1] if len(points) > 3 else None
    if normal is None:
        normal = np.cross(points[1] - points[0], points[2] - points[0])
        normal = normal / np.linalg.norm(normal)
    return normal, bool(np.abs(centred @ normal).max() <= tolerance)


def _on_a_circle(xyz: FloatArray, stretched: FloatArray, normal: FloatArray) -> Triangulation:
    """Join points on one circle along it; on a great circle, not across a gap of half a turn."""
    m = len(xyz)
    first = stretched[0] - stretched.mean(axis=0)
    first -= normal * (first @ normal)
    second = np.cross(normal, first)
    centred = stretched - stretched.mean(axis=0)
    # The image of the circle is an ellipse about the mean's plane: convex, so angles seen from
    # any point inside it (their mean) give the order along it.
    order = np.argsort(np.arctan2(centred @ second, centred @ first), kind="stable")
    cycle = np.stack([order, np.roll(order, -1)], axis=1)
    spread = float(np.linalg.norm(xyz - xyz[0], axis=1).max())
    offset = _face_offset(xyz, _widest_triangle(xyz))
    keep = np.ones(m, dtype=bool)
    if abs(offset) <= _RELATIVE + _DUST / spread**2:
        keep = _not_round_the_back(xyz, cycle)
    everything = _sorted_pairs(cycle)
    return Triangulation(_sorted_pairs(cycle[keep]), everything)


def _not_round_the_back(xyz: FloatArray, cycle: Pairs) -> npt.NDArray[np.bool_]:
    """Tell, for points in order along a great circle, which steps are under half a turn."""
    step = np.cross(xyz[cycle[:, 0]], xyz[cycle[:, 1]])
    a, b, c = xyz[_widest_triangle(xyz)]
    turn = step @ np.cross(b - a, c - a) / np.linalg.norm(np.cross(b - a, c - a))
    # At most one step is half a turn or more, so the majority says which way round they go.
    way = np.sign(np.count_nonzero(turn > 1e-12) - np.count_nonzero(turn < -1e-12))
    return np.asarray(way * turn > 1e-12)


def _widest_triangle(xyz: FloatArray) -> npt.NDArray[np.int64]:
    """Three points far apart: the best conditioned plane."""
    a = 0
    b = int(np.argmax(np.linalg.norm(xyz - xyz[a], axis=1)))
    area = np.linalg.norm(np.cross(xyz - xyz[a], xyz[b] - xyz[a]), axis=1)
    return np.array([a, b, int(np.argmax(area))])


def _face_offset(xyz: FloatArray, corners: npt.NDArray[np.int64]) -> float:
    """Cosine of the radius of the circle through three points (up to sign)."""
    a, b, c = xyz[corners]
    normal = np.cross(b - a, c - a)
    return float(normal @ a / np.linalg.norm(normal))


def _hull(points: FloatArray) -> Pairs:
    """(F, 3) triangles of the hull, anticlockwise from outside; all points, every edge twice."""
    for options in ("Qt", "QJ Pp"):
        try:
            hull = ConvexHull(points, qhull_options=options)
        except QhullError:
            continue
        faces = hull.simplices.astype(np.int64)
        if len(np.unique(faces)) == len(points) and len(faces) == 2 * len(points) - 4:
            a, b, c = points[faces.T]
            inward = np.einsum("ij,ij->i", np.cross(b - a, c - a), hull.equations[:, :3]) < 0
            faces[inward] = faces[inward][:, ::-1]
            return np.asarray(faces)
    raise GraphError(
        "The traditions lie too close together, or too nearly on one circle, to be triangulated. "
        "Take `graph.rule` nearest:K instead, or give traditions at one place the same coordinates."
    )


def _from_faces(xyz: FloatArray, faces: Pairs) -> Triangulation:
    sides = np.sort(faces[:, [[1, 2], [0, 2], [0, 1]]].reshape(-1, 2), axis=1)
    order = np.lexsort((sides[:, 1], sides[:, 0]))
    edge = sides[order[::2]]
    if not (edge == sides[order[1::2]]).all():
        raise GraphError("The traditions cannot be triangulated; take `graph.rule` nearest:K.")
    left, right = order[::2] // 3, order[1::2] // 3
    far_left, far_right = faces.ravel()[order[::2]], faces.ravel()[order[1::2]]
    flat = _on_one_circle(xyz, edge, far_left, far_right)
    inner, face = _inner_faces(xyz, faces, left[flat], right[flat])
    keep = (face[left] != face[right]) & (inner[left] | inner[right])
    return Triangulation(edge[keep], edge)


def _on_one_circle(
    xyz: FloatArray, edge: Pairs, p: npt.NDArray[np.int64], q: npt.NDArray[np.int64]
) -> npt.NDArray[np.bool_]:
    """Whether the four corners of the two triangles on an edge lie on one circle.

    The outward normals of the triangles are the corners of the Voronoi cells, so the angle between
    them, (volume) · (edge) / (area · area), is the length of the border the two cells share. It is
    nothing when it is a billionth of the edge, or when the volume is no more than rounding.
    """
    a = xyz[edge[:, 0]]
    to_b, to_p, to_q = xyz[edge[:, 1]] - a, xyz[p] - a, xyz[q] - a
    bp, bq, pq = np.cross(to_b, to_p), np.cross(to_b, to_q), np.cross(to_p, to_q)
    volume = np.abs(np.einsum("ij,ij->i", to_b, pq))
    area_p, area_q, area_pq = (np.linalg.norm(x, axis=1) for x in (bp, bq, pq))
    dust = _DUST * (area_p + area_q + area_pq)
    return np.asarray(volume <= _RELATIVE * area_p * area_q + dust)


def _inner_faces(
    xyz: FloatArray, faces: Pairs, left: npt.NDArray[np.int64], right: npt.NDArray[np.int64]
) -> tuple[npt.NDArray[np.bool_], npt.NDArray[np.int64]]:
    """Tell which triangles belong to a face whose cap is less than a hemisphere, and which face."""
    merged = coo_array((np.ones(len(left)), (left, right)), shape=(len(faces),) * 2)
    count, face = connected_components(merged, directed=False)
    corner = xyz[faces]
    arm1, arm2 = corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]
    normal = np.cross(arm1, arm2)
    area = np.linalg.norm(normal, axis=1)
    normal /= area[:, None]
    offset = np.einsum("ij,ij->i", normal, corner[:, 0])
    longest = np.sqrt(np.maximum((arm1**2).sum(axis=1), (arm2**2).sum(axis=1)))
    inner = offset > _RELATIVE + _DUST * longest / area
    # A face of many triangles is judged by its largest one; the others may be slivers.
    biggest = np.empty(count, dtype=np.int64)
    order = np.argsort(area, kind="stable")
    biggest[face[order]] = order
    return inner[biggest[face]], face


def _sorted_pairs(pairs: Pairs) -> Pairs:
    return np.asarray(np.unique(np.sort(pairs, axis=1), axis=0), dtype=np.int64)
