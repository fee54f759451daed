"""Readable twin of the network's kernels, in double precision."""

from __future__ import annotations

import itertools

import numpy as np
import numpy.typing as npt

from twicetold.evidence.shares.simplex import Simplex

FloatArray = npt.NDArray[np.float64]


def layers(parameters: npt.ArrayLike, sizes: npt.ArrayLike) -> list[tuple[FloatArray, FloatArray]]:
    """Cut flat parameters into (weights, biases) of the three layers."""
    flat, out, at = np.asarray(parameters, dtype=np.float64), [], 0
    units = [int(u) for u in np.asarray(sizes)]
    for fan, width in itertools.pairwise(units):
        weights = flat[at : at + width * fan].reshape(width, fan)
        at += width * fan
        out.append((weights, flat[at : at + width]))
        at += width
    return out


def weights_plain(
    inputs: npt.ArrayLike, parameters: npt.ArrayLike, sizes: npt.ArrayLike, where: Simplex
) -> tuple[FloatArray, list[FloatArray]]:
    """(S, G) knot weights, and what entered each layer."""
    entered = [np.asarray(inputs, dtype=np.float64)]
    *hidden, last = layers(parameters, sizes)
    for weights, biases in hidden:
        z = entered[-1] @ weights.T + biases
        entered.append(np.where(z > 0, z, 0.01 * z))
    coefficients = entered[-1] @ last[0].T + last[1]
    z = coefficients @ where.basis.T + np.log(where.prior)
    e = np.exp(z - z.max(axis=1, keepdims=True))
    return e / e.sum(axis=1, keepdims=True), entered


def score_plain(  # noqa: PLR0917 - as the kernel
    inputs: npt.ArrayLike,
    truth: tuple[npt.NDArray[np.int64], FloatArray],
    weight: FloatArray,
    parameters: npt.ArrayLike,
    sizes: npt.ArrayLike,
    where: Simplex,
) -> tuple[float, FloatArray]:
    """Weighted mean log density of the true shares, and the gradient of minus it."""
    told, entered = weights_plain(inputs, parameters, sizes, where)
    knots, factors = truth
    part = np.take_along_axis(told, knots, axis=1) * factors
    density = part.sum(axis=1)
    share = weight / weight.sum()
    g = told.copy()
    for row in range(len(g)):
        np.add.at(g[row], knots[row], -part[row] / density[row])
    g = (g * share[:, None]) @ where.basis
    gradient: list[FloatArray] = []
    for (weights, _), below in zip(
        reversed(layers(parameters, sizes)), reversed(entered), strict=True
    ):
        gradient = [(g.T @ below).ravel(), g.sum(axis=0), *gradient]
        g = (g @ weights) * np.where(below > 0, 1.0, 0.01)
    return float(share @ np.log(density)), np.concatenate(gradient)
