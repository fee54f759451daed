"""From a bank to the posterior of a motif's route shares, and when there is nothing to say."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from twicetold.evidence.results import RouteShares
from twicetold.evidence.shares.bank import MODEL, SMALLEST, Bank, drawn_density
from twicetold.evidence.shares.features import Scale, features, fit_scale, holder_knots
from twicetold.evidence.shares.heldout import HeldOut, at_knots, sharpened
from twicetold.evidence.shares.landscape import Landscape
from twicetold.evidence.shares.network import Ensemble, Lessons, train
from twicetold.evidence.shares.simplex import Simplex, hat_masses, simplex
from twicetold.spread import ROUTES, SpreadError
from twicetold.workers import Pool, ThreadPool

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int32]

#: Every tenth walk is kept from training, to recalibrate and to decide where to refuse.
HELD_OUT = 10
#: Networks, and steps of each one's training.
MEMBERS, STEPS = 2, 3500
#: Snapshots turned into features at a time.
_BLOCK = 20_000
#: Arrays of the simplex, kept with a model: summing them up takes longer than all the rest.
_OF_SIMPLEX = ("knots", "prior", "centre", "marginal", "basis")
#: Shares are refused where intervals are on average wider than this part of the prior's.
NARROWER = 0.95


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
    where : Simplex
        The simplex the densities stand on.
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
    where: Simplex
    scale: Scale
    ensemble: Ensemble
    sharpness: FloatArray
    width: FloatArray

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
        return [self._refused(reason) if reason else next(answers) for reason in reasons]

    def weights(self, summaries: npt.ArrayLike, holders: npt.ArrayLike) -> FloatArray:
        """(S, G) posterior weights of the knots for S rows of summaries."""
        values = features(summaries, holders)
        raw = self.ensemble.weights(self.scale.apply(values, holders))
        return sharpened(raw, self.where.prior, at_knots(self.sharpness, holders, self.scale.knots))

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
        if float(at_knots(self.width, np.array([n]), self.scale.knots)[0]) > NARROWER:
            return (
                f"at {n} holders on this map the shares would be no better known than before "
                "looking (intervals as wide as with no data)"
            )
        return ""

    def _refused(self, reason: str) -> RouteShares:
        nothing = np.full(self.routes, np.nan)
        nothing.flags.writeable = False
        return RouteShares(
            routes=ROUTES[: self.routes],
            mean=nothing,
            low=nothing,
            high=nothing,
            grid=self.where.knots,
            weight=self.where.prior,
            refused=reason,
        )

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
    steps: int = STEPS,
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
    steps : int
        Steps of each network's training.
    """
    name = f"{MODEL}{seed}-{members}-{steps}"
    found = None if bank.entry is None else bank.entry.read(name)
    if found is None:
        found = _learnt(bank, seed=seed, pool=pool or ThreadPool(), members=members, steps=steps)
        if bank.entry is not None:
            bank.entry.write(name, found)
    for array in found.values():
        array.flags.writeable = False
    where = Simplex(bank.routes, **{f: found[f"simplex_{f}"] for f in _OF_SIMPLEX})
    return SharesModel(
        map=bank.map,
        routes=bank.routes,
        largest=bank.largest,
        where=where,
        scale=Scale(found["knots"], found["centre"], found["gain"]),
        ensemble=Ensemble(found["sizes"], found["parameters"], where),
        sharpness=found["sharpness"],
        width=found["width"],
    )


def _learnt(
    bank: Bank, *, seed: int, pool: Pool, members: int, steps: int
) -> dict[str, npt.NDArray[Any]]:
    """Train on nine walks of ten, recalibrate on the tenth; the model as plain arrays."""
    where = simplex(bank.routes)
    kept = bank.weight > 0.0
    holders = bank.counts[kept]
    weight = (bank.weight * bank.prior[:, None])[kept]
    walk_of, slot = np.nonzero(kept)
    values = _features(bank, walk_of, slot)
    knots = holder_knots(int(holders.min()), int(holders.max()))
    scale = fit_scale(values, holders, weight, knots)
    inputs = scale.apply(values, holders)
    around, factors = where.density_factors(bank.shares[walk_of])
    # Split by walk: the snapshots of one walk are not independent.
    out = walk_of % HELD_OUT == HELD_OUT - 1 if bank.walks >= HELD_OUT else walk_of >= 0
    use = ~out if bank.walks >= HELD_OUT else out
    lessons = Lessons(
        inputs[use],
        around[use],
        factors[use].astype(np.float32),
        # Under the density drawn from; the flat prior comes in afterwards.
        np.asarray(bank.weight[kept][use] / bank.weight[kept][use].mean()),
        hat_masses(bank.routes, drawn_density),
    )
    ensemble = train(lessons, where, seed=seed, members=members, steps=steps, pool=pool)
    check = HeldOut(
        ensemble.weights(inputs[out]), around[out], factors[out], holders[out], weight[out]
    )
    sharpness = check.sharpness(where, knots)
    return {
        **{f"simplex_{f}": getattr(where, f) for f in _OF_SIMPLEX},
        "knots": knots,
        "centre": scale.centre,
        "gain": scale.gain,
        "sizes": ensemble.sizes,
        "parameters": ensemble.parameters,
        "sharpness": sharpness,
        "width": check.width(where, knots, sharpness),
    }


def _features(
    bank: Bank, walk_of: npt.NDArray[np.intp], slot: npt.NDArray[np.intp]
) -> npt.NDArray[np.float32]:
    """Features of the bank's snapshots, block by block to spare memory; (S, D) float32."""
    blocks = []
    for at in range(0, len(walk_of), _BLOCK):
        w, k = walk_of[at : at + _BLOCK], slot[at : at + _BLOCK]
        blocks.append(features(bank.summaries[w, k], bank.counts[w, k]).astype(np.float32))
    return np.concatenate(blocks)


def route_shares(bank: Bank, holder_sets: Sequence[IntArray], *, seed: int) -> list[RouteShares]:
    """Fit the posterior and apply it: see :func:`fit_posterior`, :meth:`SharesModel.posterior`."""
    return fit_posterior(bank, seed=seed).posterior(holder_sets)


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
