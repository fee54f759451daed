"""Compiled kernels of the network: every sum in a fixed order, so that the same bits come out
whatever the number of threads, of rows in a call, or the width of the processor's registers.

Samples lie along the last axis, which is never summed over inside a vector loop. The readable twin
is in ``_network_plain.py``.
"""
# ruff: noqa: PLR0917 - kernels take plain arrays, one by one

from __future__ import annotations

import math

import numba as nb
import numpy as np

#: Slope of the hidden units below zero.
LEAK = np.float32(0.01)
_LOG2E = np.float32(1.4426950408889634)
_LN2_HIGH = np.float32(0.693359375)
_LN2_LOW = np.float32(-2.12194440e-4)
_HALVES = (0.5 ** np.arange(128)).astype(np.float32)


@nb.njit(nogil=True, cache=True)
def matmul(left, right, out):  # type: ignore[no-untyped-def]
    """``out = left @ right`` in float32; each entry sums over k in order, four at a time."""
    rows, inner = left.shape
    width = right.shape[1]
    for j in range(rows):
        z = out[j]
        for s in range(width):
            z[s] = np.float32(0.0)
        k = 0
        while k + 4 <= inner:
            w0 = left[j, k]
            w1 = left[j, k + 1]
            w2 = left[j, k + 2]
            w3 = left[j, k + 3]
            a0 = right[k]
            a1 = right[k + 1]
            a2 = right[k + 2]
            a3 = right[k + 3]
            for s in range(width):
                z[s] += (w0 * a0[s] + w1 * a1[s]) + (w2 * a2[s] + w3 * a3[s])
            k += 4
        while k < inner:
            w0 = left[j, k]
            a0 = right[k]
            for s in range(width):
                z[s] += w0 * a0[s]
            k += 1


@nb.njit(nogil=True, cache=True)
def _transpose(values, out):  # type: ignore[no-untyped-def]
    for i in range(values.shape[0]):
        for j in range(values.shape[1]):
            out[j, i] = values[i, j]


@nb.njit(nogil=True, cache=True)
def _hidden(z, bias):  # type: ignore[no-untyped-def]
    for j in range(z.shape[0]):
        for s in range(z.shape[1]):
            v = z[j, s] + bias[j]
            z[j, s] = v if v > np.float32(0.0) else LEAK * v


@nb.njit(nogil=True, cache=True)
def softmax(z, base):  # type: ignore[no-untyped-def]
    """Turn (G, B) scores, on top of ``base``, into weights summing to 1 over G, in place."""
    top = np.empty(z.shape[1], dtype=np.float32)
    total = np.zeros(z.shape[1], dtype=np.float32)
    for s in range(z.shape[1]):
        top[s] = z[0, s] + base[0]
    for j in range(z.shape[0]):
        for s in range(z.shape[1]):
            z[j, s] += base[j]
            top[s] = max(top[s], z[j, s])
    for j in range(z.shape[0]):
        for s in range(z.shape[1]):
            # exp by halving and a polynomial: library versions differ in the last bit by lane.
            x = max(z[j, s] - top[s], np.float32(-80.0))
            k = int(np.float32(0.5) - x * _LOG2E)
            r = x + np.float32(k) * _LN2_HIGH
            r = r + np.float32(k) * _LN2_LOW
            p = np.float32(1.0 / 720.0)
            p = p * r + np.float32(1.0 / 120.0)
            p = p * r + np.float32(1.0 / 24.0)
            p = p * r + np.float32(1.0 / 6.0)
            p = p * r + np.float32(0.5)
            p = p * r + np.float32(1.0)
            p = p * r + np.float32(1.0)
            e = p * _HALVES[k]
            z[j, s] = e
            total[s] += e
    for j in range(z.shape[0]):
        for s in range(z.shape[1]):
            z[j, s] /= total[s]


@nb.njit(nogil=True, cache=True)
def forward(x, layers, basis, base, h1, h2, c, z):  # type: ignore[no-untyped-def]
    """Fill the hidden layers, the coefficients ``c`` of the basis and the weights ``z``."""
    w1, b1, w2, b2, w3, b3 = layers
    matmul(w1, x, h1)
    _hidden(h1, b1)
    matmul(w2, h1, h2)
    _hidden(h2, b2)
    matmul(w3, h2, c)
    for j in range(c.shape[0]):
        for s in range(c.shape[1]):
            c[j, s] += b3[j]
    matmul(basis, c, z)
    softmax(z, base)


@nb.njit(nogil=True, cache=True)
def _layers(flat, sizes):  # type: ignore[no-untyped-def]
    """Views of flat parameters as the weights and biases of the three layers."""
    d, a, b, q = sizes[0], sizes[1], sizes[2], sizes[3]
    e1 = a * d
    e2 = e1 + a
    e3 = e2 + b * a
    e4 = e3 + b
    e5 = e4 + q * b
    return (
        flat[:e1].reshape(a, d),
        flat[e1:e2],
        flat[e2:e3].reshape(b, a),
        flat[e3:e4],
        flat[e4:e5].reshape(q, b),
        flat[e5:],
    )


@nb.njit(nogil=True, cache=True)
def _layer_back(g, below, weight, step, grad_w, grad_b, below_t, weight_t, g_below):  # type: ignore[no-untyped-def]
    """Gradients of one layer; ``g_below`` (may be empty) is filled with that of the layer below."""
    _transpose(below, below_t)
    matmul(g, below_t, grad_w)
    for j in range(g.shape[0]):
        total = np.float32(0.0)
        for s in range(g.shape[1]):
            total += g[j, s]
        grad_b[j] = total
    if step:
        _transpose(weight, weight_t)
        matmul(weight_t, g, g_below)
        for j in range(below.shape[0]):
            for s in range(below.shape[1]):
                if below[j, s] <= np.float32(0.0):
                    g_below[j, s] *= LEAK


@nb.njit(nogil=True, cache=True)
def _adam(value, grad, first, second, rate, fix1, fix2, decay):  # type: ignore[no-untyped-def]
    """One step of Adam (Kingma & Ba 2015) with decoupled decay, over flat views."""
    for i in range(value.size):
        g = grad[i]
        first[i] = np.float32(0.9) * first[i] + np.float32(0.1) * g
        second[i] = np.float32(0.999) * second[i] + np.float32(0.001) * g * g
        size = np.float32(math.sqrt(second[i] * fix2)) + np.float32(1e-8)
        value[i] -= rate * (first[i] * fix1 / size + decay * value[i])


@nb.njit(nogil=True, cache=True)
def _pull(z, rows, knots, factors, weight):  # type: ignore[no-untyped-def]
    """Turn weights ``z`` into the gradient of minus the mean log density; give the score.

    d(-log density) / d score_k is z_k, less z_k f_k / density at the corners around the truth.
    Returns the weighted sum of log densities and the sum of weights.
    """
    corners = knots.shape[1]
    part = np.empty(corners, dtype=np.float32)
    total = 0.0
    score = 0.0
    for row in rows:
        total += weight[row]
    for s in range(len(rows)):
        row = rows[s]
        w = np.float32(weight[row] / total)
        density = np.float32(1e-30)
        for k in range(corners):
            part[k] = z[knots[row, k], s] * factors[row, k]
            density += part[k]
        score += weight[row] * math.log(density)
        for k in range(z.shape[0]):
            z[k, s] *= w
        for k in range(corners):
            z[knots[row, k], s] -= w * part[k] / density
    return score, total


@nb.njit(nogil=True, cache=True)
def train_steps(  # type: ignore[no-untyped-def]
    inputs, knots, factors, weight, order, batch, basis, base, parameters, first, second, sizes,
    taken, total, rate, decay,
):  # fmt: skip
    """Take ``len(order) // batch`` steps down the weighted minus log density of the true shares.

    ``parameters`` (with Adam's ``first`` and ``second``) are flat float32 arrays changed in place:
    three weight matrices and biases of layers ``sizes``. Returns the mean weighted log density.
    """
    d, a, b, q = sizes[0], sizes[1], sizes[2], sizes[3]
    points = basis.shape[0]
    layers = _layers(parameters, sizes)
    grad = np.empty_like(parameters)
    gw1, gb1, gw2, gb2, gw3, gb3 = _layers(grad, sizes)
    x = np.empty((d, batch), dtype=np.float32)
    h1 = np.empty((a, batch), dtype=np.float32)
    h2 = np.empty((b, batch), dtype=np.float32)
    c = np.empty((q, batch), dtype=np.float32)
    z = np.empty((points, batch), dtype=np.float32)
    x_t = np.empty((batch, d), dtype=np.float32)
    h1_t = np.empty((batch, a), dtype=np.float32)
    h2_t = np.empty((batch, b), dtype=np.float32)
    w1_t = np.empty((d, a), dtype=np.float32)
    w2_t = np.empty((a, b), dtype=np.float32)
    w3_t = np.empty((b, q), dtype=np.float32)
    basis_t = np.empty((q, points), dtype=np.float32)
    _transpose(basis, basis_t)
    g2 = np.empty((b, batch), dtype=np.float32)
    g1 = np.empty((a, batch), dtype=np.float32)
    score = 0.0
    mass = 0.0
    for step in range(len(order) // batch):
        rows = order[step * batch : (step + 1) * batch]
        for s in range(batch):
            for k in range(d):
                x[k, s] = inputs[rows[s], k]
        forward(x, layers, basis, base, h1, h2, c, z)
        gained, weighed = _pull(z, rows, knots, factors, weight)
        score += gained
        mass += weighed
        matmul(basis_t, z, c)
        _layer_back(c, h2, layers[4], True, gw3, gb3, h2_t, w3_t, g2)
        _layer_back(g2, h1, layers[2], True, gw2, gb2, h1_t, w2_t, g1)
        _layer_back(g1, x, layers[0], False, gw1, gb1, x_t, w1_t, g1)
        now = taken + step
        # The rate falls to nothing along half a cosine.
        speed = np.float32(rate * 0.5 * (1.0 + math.cos(math.pi * now / total)))
        fix1 = np.float32(1.0 / (1.0 - 0.9 ** (now + 1)))
        fix2 = np.float32(1.0 / (1.0 - 0.999 ** (now + 1)))
        _adam(parameters, grad, first, second, speed, fix1, fix2, np.float32(decay))
    return score / mass


@nb.njit(nogil=True, cache=True)
def weights_of(inputs, parameters, sizes, basis, base, out):  # type: ignore[no-untyped-def]
    """Fill ``out`` ((rows, G) float32) with the network's weights for each row of ``inputs``."""
    d, a, b, q = sizes[0], sizes[1], sizes[2], sizes[3]
    width = 128
    x = np.zeros((d, width), dtype=np.float32)
    h1 = np.empty((a, width), dtype=np.float32)
    h2 = np.empty((b, width), dtype=np.float32)
    c = np.empty((q, width), dtype=np.float32)
    z = np.empty((basis.shape[0], width), dtype=np.float32)
    layers = _layers(parameters, sizes)
    for at in range(0, inputs.shape[0], width):
        rows = min(width, inputs.shape[0] - at)
        for s in range(rows):
            for k in range(d):
                x[k, s] = inputs[at + s, k]
        forward(x, layers, basis, base, h1, h2, c, z)
        for s in range(rows):
            for k in range(z.shape[0]):
                out[at + s, k] = z[k, s]
