"""A small ensemble of networks from features to a density over the simplex.

Each network has two hidden layers, which give a log density made of smooth functions of the shares,
laid over the hats of :mod:`simplex`; it is trained to the log density it gives to the shares each
snapshot truly came from. That score is proper (Gneiting & Raftery 2007, JASA 102:359): its best
answer is the posterior under the prior the bank was drawn from. What the network itself gives is
that posterior's logarithm without the prior, a log likelihood: laid over the flat prior it is the
posterior wanted. Minibatch steps are Adam's (Kingma & Ba 2015).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from twicetold.evidence.shares._network_kernels import train_steps, weights_of
from twicetold.evidence.shares.simplex import Simplex
from twicetold.randomness import Stream, chunk_generator
from twicetold.workers import Pool, ThreadPool

FloatArray = npt.NDArray[np.float64]
Float32 = npt.NDArray[np.float32]

#: Units of the two hidden layers.
HIDDEN = (64, 64)
#: Snapshots in one step.
BATCH = 512
#: First rate of the steps, and decay of the parameters per unit of it.
RATE, DECAY = 3e-3, 1e-4
#: Times a network may see the same snapshot.
_REPEATS = 20
#: Steps between two looks at whether to stop (a fraction of a second).
_SEGMENT = 100


@dataclass(frozen=True)
class Lessons:
    """What the networks learn from. Arrays are read-only.

    Parameters
    ----------
    inputs : (S, D) float32
        Standardised features.
    knots, factors : (S, C) int64, (S, C) float32
        The density of the true shares over the prior is ``sum(weights[knots] * factors)``.
    weight : (S,) float64
        Importance of each snapshot.
    drawn : (G,) float64
        Probability of each hat under the density the true shares were drawn from.
    """

    inputs: Float32
    knots: npt.NDArray[np.int64]
    factors: Float32
    weight: FloatArray
    drawn: FloatArray


@dataclass(frozen=True)
class Ensemble:
    """Trained networks.

    Parameters
    ----------
    sizes : (4,) int64
        Features, units of the hidden layers, functions of the basis.
    parameters : (E, P) float32
    where : Simplex
    """

    sizes: npt.NDArray[np.int64]
    parameters: Float32
    where: Simplex

    def weights(self, inputs: Float32) -> FloatArray:
        """Average the members' knot weights under the flat prior; (S, G), rows sum to 1."""
        total = np.zeros((len(inputs), len(self.where.knots)))
        out = np.empty(total.shape, dtype=np.float32)
        basis, base = _stage(self.where, self.where.prior)
        for member in self.parameters:
            weights_of(inputs, member, self.sizes, basis, base, out)
            total += out
        return np.asarray(total / total.sum(axis=1, keepdims=True))


@dataclass
class _Learner:
    """One network under training; its arrays are changed in place by its own thread only."""

    parameters: Float32
    first: Float32
    second: Float32
    order: npt.NDArray[np.int64]
    taken: int = 0


def starting_parameters(sizes: npt.NDArray[np.int64], rng: np.random.Generator) -> Float32:
    """Draw He's starting weights; the output starts near the flat prior (coefficients near 0)."""
    parts = []
    for layer in range(3):
        fan, units = int(sizes[layer]), int(sizes[layer + 1])
        scale = np.sqrt(2.0 / fan) * (0.1 if layer == 2 else 1.0)
        parts += [rng.normal(scale=scale, size=fan * units), np.zeros(units)]
    return np.concatenate(parts).astype(np.float32)


def _stage(where: Simplex, prior: FloatArray) -> tuple[Float32, Float32]:
    """Basis and log prior in single precision."""
    return np.ascontiguousarray(where.basis, np.float32), np.log(prior).astype(np.float32)


def train(
    lessons: Lessons, where: Simplex, *, seed: int, members: int, steps: int, pool: Pool
) -> Ensemble:
    """Train an ensemble; the same for any number of workers.

    Parameters
    ----------
    lessons : Lessons
    where : Simplex
    seed : int
    members : int
        Networks in the ensemble.
    steps : int
        Steps of each network; fewer when that would show it a snapshot more than 20 times.
    pool : Pool
        Networks are trained on local threads, as many as the pool has, never on a cluster: they
        share the lessons in memory.
    """
    rows, width = lessons.inputs.shape
    sizes = np.array([width, *HIDDEN, where.basis.shape[1]], dtype=np.int64)
    batch = min(BATCH, rows)
    total = max(1, min(steps, _REPEATS * rows // batch))
    learners = []
    for member in range(members):
        rng = chunk_generator(seed, Stream.SHARES, member)
        start = starting_parameters(sizes, rng)
        repeats = [rng.permutation(rows) for _ in range(-(-total * batch // rows))]
        order = np.concatenate(repeats)[: total * batch]
        learners.append(_Learner(start, np.zeros_like(start), np.zeros_like(start), order))
    threads = ThreadPool(min(members, getattr(pool, "workers", 1)))
    progress = getattr(pool, "progress", None)
    for step in range(0, total, _SEGMENT):
        stop = min(step + _SEGMENT, total)
        jobs = [(learner, stop, total, batch) for learner in learners]
        for _ in threads.run(_segment, (lessons, sizes, where), jobs, label="training"):
            pass
        if progress is not None:
            progress("learning the shares", stop, total)
    out = np.stack([learner.parameters for learner in learners])
    out.flags.writeable = False
    return Ensemble(sizes, out, where)


def _segment(
    shared: tuple[Lessons, npt.NDArray[np.int64], Simplex], job: tuple[_Learner, int, int, int]
) -> float:
    lessons, sizes, where = shared
    learner, stop, total, batch = job
    score = train_steps(
        lessons.inputs,
        lessons.knots,
        lessons.factors,
        lessons.weight,
        learner.order[learner.taken * batch : stop * batch],
        batch,
        *_stage(where, lessons.drawn),
        learner.parameters,
        learner.first,
        learner.second,
        sizes,
        learner.taken,
        total,
        RATE,
        DECAY,
    )
    learner.taken = stop
    return float(score)
