"""Densities over the simplex of route shares, piecewise linear between evenly spaced knots.

A density is a weighted sum of *hats*: the hat of a knot is 1 there, 0 at every other knot and
linear on the small triangles between (segments when there are two routes), scaled to integrate to
1. The weight of a knot is the probability its hat carries. Against the flat prior the density at a
knot is ``weight / prior`` exactly, which is the likelihood ratio a mixture over motifs needs.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import numpy.typing as npt
from scipy.special import eval_jacobi

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

#: Knots are 1 / STEPS apart.
STEPS = 20
#: Bins of a share's marginal; a multiple of STEPS, so that hats are linear inside each bin.
BINS = 400
#: Highest degree of the polynomials that log densities are made of.
DEGREE = 6
#: Ends of intervals closer than this to 0 or 1 are put there.
SNAP = 0.02
#: Points across a small triangle at which the marginals of hats are integrated.
_FINE = 40


@dataclass(frozen=True)
class Simplex:
    """Knots and hats. Arrays are read-only.

    Parameters
    ----------
    routes : int
        3, or 2 when there are no families (inheritance is then 0 throughout).
    knots : (G, 3) float64
        Shares of emergence, contact and inheritance.
    prior : (G,) float64
        Probability of each hat under the flat density; sums to 1.
    centre : (G, 3) float64
        Mean of each hat.
    marginal : (routes, G, BINS) float64
        Probability of each bin of each share under each hat.
    basis : (G, Q) float64
        Smooth functions at the knots, orthonormal over the simplex: all polynomials of degree 1
        to DEGREE. Log densities are made of them, so that noise does not pass for shape.
    """

    routes: int
    knots: FloatArray
    prior: FloatArray
    centre: FloatArray
    marginal: FloatArray
    basis: FloatArray

    def locate(self, shares: FloatArray) -> tuple[IntArray, FloatArray]:
        """Give the knots around each point and its barycentric coordinates among them.

        Parameters
        ----------
        shares : (B, 3) float64

        Returns
        -------
        (B, routes) int64, (B, routes) float64
        """
        return _locate(np.asarray(shares, dtype=np.float64), self.routes)

    def density_factors(self, shares: FloatArray) -> tuple[IntArray, FloatArray]:
        """Give knots and factors whose product with the weights sums to density over prior."""
        knots, inside = self.locate(shares)
        return knots, inside / self.prior[knots]

    def intervals(self, weight: FloatArray, level: float = 0.9) -> tuple[FloatArray, FloatArray]:
        """Shortest interval of each share holding ``level`` of its marginal.

        The shortest interval ends at 0 when the marginal piles up there (one with equal tails never
        holds 0). At 1 the flat prior of three shares vanishes, so no interval would ever hold a
        pure route; ends within ``SNAP`` of 0 or 1, closer than knots can tell, are put there.

        Parameters
        ----------
        weight : (B, G) float64
        level : float

        Returns
        -------
        low, high : (B, routes) float64
        """
        low = np.empty((len(weight), self.routes))
        high = np.empty_like(low)
        for r in range(self.routes):
            # einsum without BLAS: the same bits whatever the number of threads or of rows.
            mass = np.einsum("bg,gk->bk", weight, self.marginal[r], optimize=False)
            for b in range(len(weight)):
                low[b, r], high[b, r] = _shortest(mass[b], level)
        low[low < SNAP] = 0.0
        high[high > 1.0 - SNAP] = 1.0
        return low, high


def _shortest(mass: FloatArray, level: float) -> tuple[float, float]:
    """Ends of the shortest interval that holds ``level`` of a binned density on 0..1."""
    edges = np.linspace(0.0, 1.0, len(mass) + 1)
    below = np.concatenate([[0.0], np.cumsum(mass)])
    below /= below[-1]
    # From every bin edge upwards, and (for intervals that end at an edge) downwards.
    up = np.interp(below + level, below, edges)
    up[below + level > 1.0 + 1e-12] = np.inf
    down = np.interp(below - level, below, edges)
    down[below - level < -1e-12] = -np.inf
    a, b = int(np.argmin(up - edges)), int(np.argmin(edges - down))
    if up[a] - edges[a] <= edges[b] - down[b]:
        return float(edges[a]), float(up[a])
    return float(down[b]), float(edges[b])


def _row(i: IntArray, j: IntArray) -> IntArray:
    """Number of the knot with emergence i and contact j steps."""
    return (i * (2 * STEPS + 3 - i)) // 2 + j


def _locate(shares: FloatArray, routes: int) -> tuple[IntArray, FloatArray]:
    u = shares[:, 0] * STEPS
    i = np.clip(np.floor(u), 0, STEPS - 1).astype(np.int64)
    fu = u - i
    if routes == 2:
        return np.stack([i, i + 1], axis=1), np.stack([1.0 - fu, fu], axis=1)
    v = shares[:, 1] * STEPS
    j = np.clip(np.floor(v), 0, STEPS - 1 - i).astype(np.int64)
    fv = v - j
    lower = (fu + fv <= 1.0) | (i + j >= STEPS - 1)
    corner = np.where(lower, _row(i, j), _row(np.minimum(i + 1, STEPS), j + 1))
    knots = np.stack([corner, _row(i + 1, j), _row(i, j + 1)], axis=1)
    inside = np.where(
        lower[:, None],
        np.stack([1.0 - fu - fv, fu, fv], axis=1),
        np.stack([fu + fv - 1.0, 1.0 - fv, 1.0 - fu], axis=1),
    )
    return knots, np.maximum(inside, 0.0)


def _quadrature(routes: int) -> FloatArray:
    """Evenly weighted points of the simplex: centroids of very small triangles (or segments)."""
    m = STEPS * _FINE
    if routes == 2:
        e = (np.arange(m) + 0.5) / m
        return np.stack([e, 1.0 - e, np.zeros(m)], axis=1)
    i, j = np.divmod(np.arange(m * m), m)
    up = i + j < m
    down = i + j < m - 1
    e = np.concatenate([(i[up] + 1 / 3) / m, (i[down] + 2 / 3) / m])
    c = np.concatenate([(j[up] + 1 / 3) / m, (j[down] + 2 / 3) / m])
    return np.stack([e, c, np.maximum(1.0 - e - c, 0.0)], axis=1)


def hat_masses(routes: int, density: Callable[[FloatArray, int], FloatArray]) -> FloatArray:
    """(G,) probability of each hat's part of another density (given over the flat one)."""
    points = _quadrature(routes)
    around, inside = _locate(points, routes)
    part = inside * density(points, routes)[:, None]
    mass = np.bincount(around.ravel(), part.ravel(), len(simplex(routes).knots))
    return np.asarray(mass / mass.sum())


def _polynomials(shares: FloatArray, routes: int) -> FloatArray:
    """Orthonormal polynomials over the flat simplex, the constant left out.

    Legendre's on the segment; Koornwinder's (1975) products of Jacobi polynomials on the triangle,
    normalised to mean square 1 under the flat density.
    """
    e = shares[:, 0]
    if routes == 2:
        terms = [np.sqrt(2 * k + 1) * eval_jacobi(k, 0, 0, 2 * e - 1) for k in range(1, DEGREE + 1)]
        return np.stack(terms, axis=1)
    rest = 1.0 - e
    # Among what is not emergence, contact against inheritance; at e = 1 the factor rest**k is 0.
    split = np.where(rest > 0, 2.0 * shares[:, 1] / np.where(rest > 0, rest, 1.0) - 1.0, 0.0)
    out = []
    for total in range(1, DEGREE + 1):
        for k in range(total + 1):
            j = total - k
            across = eval_jacobi(k, 0, 0, split) * rest**k
            along = eval_jacobi(j, 2 * k + 1, 0, 2 * e - 1)
            out.append(np.sqrt((2 * k + 1) * (total + 1)) * across * along)
    return np.stack(out, axis=1)


@lru_cache(maxsize=2)
def simplex(routes: int) -> Simplex:
    """Give the simplex of two or three routes.

    Raises
    ------
    ValueError
        When ``routes`` is neither 2 nor 3.
    """
    if routes == 2:
        e = np.arange(STEPS + 1) / STEPS
        knots = np.stack([e, 1.0 - e, np.zeros(STEPS + 1)], axis=1)
    elif routes == 3:
        steps = [(i, j) for i in range(STEPS + 1) for j in range(STEPS + 1 - i)]
        knots = np.array([(i, j, STEPS - i - j) for i, j in steps]) / STEPS
    else:
        raise ValueError(f"`routes` must be 2 or 3, got {routes}.")
    points = _quadrature(routes)
    around, inside = _locate(points, routes)
    size = len(knots)
    mass = np.bincount(around.ravel(), inside.ravel(), size)
    centre = np.stack(
        [
            np.bincount(around.ravel(), (inside * points[:, [r]]).ravel(), size) / mass
            for r in range(3)
        ],
        axis=1,
    )
    marginal = np.empty((routes, size, BINS))
    for r in range(routes):
        # A third share computed as 1 - a - b may fall a rounding error across a bin edge.
        bins = np.minimum((points[:, r] * BINS + 1e-9).astype(np.int64), BINS - 1)
        cells = around * BINS + bins[:, None]
        counted = np.bincount(cells.ravel(), inside.ravel(), size * BINS)
        marginal[r] = counted.reshape(size, BINS) / mass[:, None]
    out = Simplex(routes, knots, mass / mass.sum(), centre, marginal, _polynomials(knots, routes))
    for array in (out.knots, out.prior, out.centre, out.marginal, out.basis):
        array.flags.writeable = False
    return out
