"""From a bank to the posterior of a motif's route shares, and when there is nothing to say."""

from __future__ import annotations

import logging
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.optimize import minimize_scalar

from twicetold.evidence.results import RouteShares
from twicetold.evidence.shares.bank import SMALLEST, Bank
from twicetold.evidence.shares.features import Scale, features, fit_scale, hats, holder_knots
from twicetold.evidence.shares.landscape import Landscape
from twicetold.evidence.shares.network import Ensemble, Lessons, train
from twicetold.evidence.shares.simplex import Simplex, simplex
from twicetold.spread import ROUTES, SpreadError
from twicetold.workers import Pool, ThreadPool

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int32]

#: Every tenth walk is kept from training, to recalibrate and to decide where to refuse.
HELD_OUT = 10
#: Networks, and times each of them sees every snapshot.
MEMBERS, PASSES = 2, 5.0
#: Shares are refused where intervals are on average wider than this part of the prior's.
NARROWER = 0.95
_log = logging.getLogger(__name__)


@dataclass(frozen=True)
class SharesModel:
    """Posterior of route shares for any holder set over one map. Arrays are read-only.

    Parameters
    ----------
    map : Landscape
    routes : int
        3, or 2 without families.
    largest : int
        Largest number of holders it was made for.
    scale : Scale
    ensemble : Ensemble
    sharpness : (Q,) float64
        Power of the density at each knot of ``scale`` that held-out walks ask for.
    width : (Q,) float64
        Mean width of the 90 % intervals over that of the prior's, at each knot, on held-out walks.
    """

    map: Landscape
    routes: int
    largest: int
    scale: Scale
    ensemble: Ensemble
    sharpness: FloatArray
    width: FloatArray

    @property
    def where(self) -> Simplex:
        """The simplex the densities stand on."""
        return simplex(self.routes)

    def posterior(self, holder_sets: Sequence[IntArray]) -> list[RouteShares]:
        """Posterior of the shares for each holder set (local tradition indices).

        Each answer depends on its own holders and the model alone.

        Raises
        ------
        SpreadError
            When a set holds an index twice or outside the map.
        """
        sets = [_checked(held, self.map.n) for held in holder_sets]
        reasons = [self._refusal(len(held)) for held in sets]
        told = [held for held, reason in zip(sets, reasons, strict=True) if not reason]
        answers = iter(self._told(told))
        blank = self._blank()
        return [
            RouteShares(**blank, refused=reason) if reason else next(answers) for reason in reasons
        ]

    def weights(self, summaries: npt.ArrayLike, holders: npt.ArrayLike) -> FloatArray:
        """(S, G) posterior weights of the knots for S rows of summaries."""
        values = features(summaries, holders)
        raw = self.ensemble.weights(self.scale.apply(values, holders))
        return sharpened(raw, self.where.prior, _at(self.sharpness, holders, self.scale.knots))

    def refused_at(self, holders: int) -> str:
        """Why no shares are given at this number of holders, or nothing."""
        return self._refusal(holders)

    def _refusal(self, n: int) -> str:
        if n < SMALLEST:
            return f"fewer than {SMALLEST} holders say nothing of how a motif travelled"
        if n >= self.map.n:
            return "every surveyed tradition holds it, so its geography says nothing"
        if n > self.largest:
            return f"the bank of simulated motifs covers up to {self.largest} holders"
        if float(_at(self.width, np.array([n]), self.scale.knots)[0]) > NARROWER:
            return (
                f"at {n} holders on this map the shares would be no better known than before "
                "looking (intervals as wide as with no data)"
            )
        return ""

    def _blank(self) -> dict[str, object]:
        nothing = np.full(self.routes, np.nan)
        nothing.flags.writeable = False
        prior = self.where.prior
        return {
            "routes": ROUTES[: self.routes],
            "mean": nothing,
            "low": nothing,
            "high": nothing,
            "grid": self.where.knots,
            "weight": prior,
        }

    def _told(self, sets: list[IntArray]) -> list[RouteShares]:
        if not sets:
            return []
        sizes = np.array([len(held) for held in sets])
        start = np.concatenate([[0], np.cumsum(sizes)]).astype(np.int64)
        raw = self.map.summaries(np.concatenate(sets).astype(np.int32), start)
        weight = self.weights(raw.astype(np.float32), sizes)
        mean = means(weight, self.where)
        low, high = self.where.intervals(weight)
        # The shortest interval of a skew density may miss its mean; the mean is in it by rule.
        low, high = np.minimum(low, mean), np.maximum(high, mean)
        for array in (weight, mean, low, high):
            array.flags.writeable = False
        return [
            RouteShares(
                routes=ROUTES[: self.routes],
                mean=mean[k],
                low=low[k],
                high=high[k],
                grid=self.where.knots,
                weight=weight[k],
            )
            for k in range(len(sets))
        ]


def fit_posterior(
    bank: Bank,
    *,
    seed: int,
    pool: Pool | None = None,
    members: int = MEMBERS,
    passes: float = PASSES,
) -> SharesModel:
    """Learn the posterior from a bank; no motif's record has any part in it.

    A bank that came through the cache keeps its model there too.

    Parameters
    ----------
    bank : Bank
    seed : int
    pool : Pool, optional
    members : int
        Networks whose densities are averaged.
    passes : float
        Times each snapshot is seen by each network.
    """
    name = f"model-{seed}-{members}-{passes:g}"
    if bank.entry is not None:
        found = bank.entry.read(name)
        if found is not None:
            return _from_arrays(bank, found)
    where = simplex(bank.routes)
    kept = bank.weight > 0.0
    holders = bank.counts[kept]
    weight = (bank.weight * bank.prior[:, None])[kept]
    values = features(bank.summaries[kept], holders)
    walk_of = np.nonzero(kept)[0]
    knots = holder_knots(int(holders.min()), int(holders.max()))
    scale = fit_scale(values, holders, weight, knots)
    inputs = scale.apply(values, holders)
    del values
    around, factors = where.density_factors(bank.shares[walk_of])
    out = walk_of % HELD_OUT == HELD_OUT - 1
    lessons = Lessons(
        inputs[~out], around[~out], factors[~out].astype(np.float32), _evened(weight[~out])
    )
    ensemble = train(
        lessons, where, seed=seed, members=members, passes=passes, pool=pool or ThreadPool()
    )
    if not out.any():
        out = ~out
    raw = ensemble.weights(inputs[out])
    checked = (holders[out], weight[out], knots)
    sharp = _sharpness(raw, where, around[out], factors[out], *checked)
    told = sharpened(raw, where.prior, _at(sharp, holders[out], knots))
    model = SharesModel(
        map=bank.map,
        routes=bank.routes,
        largest=bank.largest,
        scale=scale,
        ensemble=ensemble,
        sharpness=sharp,
        width=_width(told, where, *checked),
    )
    if bank.entry is not None:
        bank.entry.write(name, _to_arrays(model))
    return model


def route_shares(bank: Bank, holder_sets: Sequence[IntArray], *, seed: int) -> list[RouteShares]:
    """Fit the posterior and apply it: see :func:`fit_posterior`, :meth:`SharesModel.posterior`."""
    return fit_posterior(bank, seed=seed).posterior(holder_sets)


def sharpened(weight: FloatArray, prior: FloatArray, power: FloatArray) -> FloatArray:
    """Raise densities to a power: ``prior (weight / prior) ** power``, summing to 1."""
    log = np.log(np.maximum(weight, 1e-30) / prior) * power[:, None]
    out = prior * np.exp(log - log.max(axis=1, keepdims=True))
    return np.asarray(out / out.sum(axis=1, keepdims=True))


def means(weight: FloatArray, where: Simplex) -> FloatArray:
    """(S, routes) posterior means."""
    centre = where.centre[:, : where.routes]
    # einsum without BLAS: the same bits for one row as for many.
    return np.asarray(np.einsum("sg,gr->sr", weight, centre, optimize=False))


def _checked(held: IntArray, n: int) -> IntArray:
    out = np.unique(np.asarray(held))
    if len(out) != len(held) or (len(out) and not 0 <= int(out[0]) <= int(out[-1]) < n):
        raise SpreadError(
            f"A holder set must hold tradition indices from 0 to {n - 1}, each once, got {held!r}."
        )
    return out.astype(np.int32)


def _at(values: FloatArray, holders: npt.ArrayLike, knots: FloatArray) -> FloatArray:
    log = np.log(np.maximum(np.asarray(holders, dtype=np.float64), 1.0))
    return np.asarray(np.interp(log, knots, values))


def _evened(weight: FloatArray) -> FloatArray:
    return np.asarray(weight / weight.mean())


def _window(
    holders: npt.NDArray[np.int32], weight: FloatArray, knots: FloatArray, q: int
) -> tuple[npt.NDArray[np.intp], FloatArray]:
    """Rows around knot q and their weights (falling to 0 at the neighbouring knots)."""
    left, inside = hats(np.log(holders.astype(np.float64)), knots)
    part = np.where(left == q, 1.0 - inside, np.where(left + 1 == q, inside, 0.0)) * weight
    rows = np.flatnonzero(part)
    return rows, part[rows]


def _sharpness(
    raw: FloatArray,
    where: Simplex,
    around: npt.NDArray[np.int64],
    factors: FloatArray,
    holders: npt.NDArray[np.int32],
    weight: FloatArray,
    knots: FloatArray,
) -> FloatArray:
    """Power at each knot that gives held-out walks the highest density (temperature scaling)."""
    out = np.ones(len(knots))
    for q in range(len(knots)):
        rows, part = _window(holders, weight, knots, q)
        if len(rows) < 100:
            continue

        def cost(power: float, rows: npt.NDArray[np.intp] = rows, part: FloatArray = part) -> float:
            told = sharpened(raw[rows], where.prior, np.full(len(rows), power))
            density = (np.take_along_axis(told, around[rows], axis=1) * factors[rows]).sum(axis=1)
            return -float(np.sum(part * np.log(np.maximum(density, 1e-30))) / part.sum())

        best = minimize_scalar(cost, bounds=(0.5, 1.5), method="bounded", options={"xatol": 1e-3})
        out[q] = float(best.x)
    out.flags.writeable = False
    return out


def _width(
    weight: FloatArray,
    where: Simplex,
    holders: npt.NDArray[np.int32],
    importance: FloatArray,
    knots: FloatArray,
) -> FloatArray:
    """Mean width of the 90 % intervals over the prior's, at each knot."""
    prior_low, prior_high = where.intervals(where.prior[None, :])
    prior = float((prior_high - prior_low).mean())
    out = np.ones(len(knots))
    for q in range(len(knots)):
        rows, part = _window(holders, importance, knots, q)
        # A few hundred rows give the mean within a percent.
        rows, part = rows[:600], part[:600]
        if len(rows) == 0:
            continue
        low, high = where.intervals(weight[rows])
        out[q] = float(np.sum(part * (high - low).mean(axis=1)) / part.sum()) / prior
    out.flags.writeable = False
    return out


def _to_arrays(model: SharesModel) -> dict[str, npt.NDArray[np.generic]]:
    return {
        "knots": model.scale.knots,
        "centre": model.scale.centre,
        "gain": model.scale.gain,
        "sizes": model.ensemble.sizes,
        "parameters": model.ensemble.parameters,
        "sharpness": model.sharpness,
        "width": model.width,
    }


def _from_arrays(bank: Bank, found: dict[str, npt.NDArray[np.generic]]) -> SharesModel:
    for array in found.values():
        array.flags.writeable = False
    a: dict[str, npt.NDArray[np.float64]] = found  # type: ignore[assignment]
    return SharesModel(
        map=bank.map,
        routes=bank.routes,
        largest=bank.largest,
        scale=Scale(a["knots"], a["centre"], a["gain"]),
        ensemble=Ensemble(found["sizes"], found["parameters"]),  # type: ignore[arg-type]
        sharpness=a["sharpness"],
        width=a["width"],
    )
