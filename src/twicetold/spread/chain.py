"""The spread chain: how one motif walks over the contact graph from first telling to oblivion.

**The chain.** A motif starts in one uniformly chosen tradition. With m holders, gains come at rate
``x m`` and losses at rate ``m`` (the unit of time is the mean life of a holding); with all N
traditions holding, only losses come. A loss takes the motif from a uniformly chosen holder. The
route of a gain is drawn from the shares:

- *emergence*: a non-holder in proportion to its propensity;
- *contact*: a uniformly chosen edge between a holder and a non-holder is crossed. With ``reach``
  above 1 the motif is then carried on: L - 1 further steps, each to a uniformly chosen neighbour
  (holder or not), L geometric on 1, 2, ... with mean ``reach``; the gain falls to the last
  non-holder the walk stood on (the first crossing ends on one, so there always is one);
- *inheritance*: a uniformly chosen holder passes it to a uniformly chosen non-holder of its family.

Where the route is impossible (no boundary edge, the chosen holder's family full) the gain goes by
emergence, and the realised routes are counted. In a world without second inventions that rule would
bring them in by the back door (small families fill at once); there (``spill="transmission"``) an
impossible inheritance goes by contact and an impossible contact by inheritance, and only where both
are impossible does the motif emerge anew. It is a birth-death relative of the contact process
(Harris 1974, Annals of Probability 2:969), normalised so that the *count* walks by itself: motifs
that appear at a constant rate and are seen at a fixed time have P(n) in proportion to x**n / n
(Fisher, Corbet & Williams 1943), on any graph and for any shares.

**Every count from one walk.** Let h(m) be the probability that the count reaches ``cap`` from m
before 0: h(m) = (x**-m - 1) / (x**-cap - 1), m / cap at x = 1. The walk goes up under Doob's
h-transform until ``cap`` and freely from there until extinction. A visit to a state with m holders
has weight 1 / h(m) before ``cap`` is first reached and 1 after, times the holding time
1 / (m (1 + x)), 1 / m at m = N. Then the expected weighted visits are, up to one constant, the
expected time the chain spends in each state, which is the law of a motif seen at a fixed time.

One visit per count and walk is kept, chosen in proportion to its weight, and carries the walk's
*total* weight for that count; dropping the weights would bias small graphs visibly.

**Recording.** Each walk draws one uniform number per tradition; a holder is recorded when its
number is below its recording probability. The recorded set then moves with the chain at no cost,
and every single visit has the right law, which is all a snapshot needs. Visits are filed under the
recorded count; a state with m holders and n recorded keeps the weight of m.

Weights are stored per recorded count n relative to x**min(n, cap) (never overflowing).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from twicetold.errors import TwicetoldError
from twicetold.graph.model import ContactGraph
from twicetold.spread._kernels import summary_kernel, walk_kernel

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int32]

#: Columns of :meth:`Snapshots.summaries`.
STATISTICS = ("joins", "joins_cross_family", "clusters", "largest_cluster", "strands")

#: Names of the three routes, in the order of every array of shares.
ROUTES = ("emergence", "contact", "inheritance")


class SpreadError(TwicetoldError):
    """The spread chain cannot be run as asked."""


@dataclass(frozen=True)
class SpreadModel:
    """What one world of the spread chain is made of.

    Parameters
    ----------
    graph : ContactGraph
        Over the N surveyed traditions.
    turnover : float
        x, gains per loss, 0 < x <= 1.
    shares : tuple of 3 float
        Shares of emergence, contact and inheritance among gains; each >= 0, sum 1.
    family : (N,) int32 or None
        Family codes from 0; None makes every tradition a family of its own.
    propensity : (N,) float64 or None
        Relative propensity of emergence, >= 0, not all 0; None takes them equal.
    reach : float
        Mean number of steps a contact walks, >= 1.
    recorded : (N,) float64 or None
        Probability that a holder is recorded, in [0, 1]; None records all.
    spill : str
        Where an impossible route goes: ``emergence``, or ``transmission`` (the other of contact
        and inheritance first).
    """

    graph: ContactGraph
    turnover: float
    shares: tuple[float, float, float] = (0.0, 1.0, 0.0)
    family: IntArray | None = None
    propensity: FloatArray | None = None
    reach: float = 1.0
    recorded: FloatArray | None = None
    spill: str = "emergence"

    def __post_init__(self) -> None:
        n = self.graph.n
        if n < 1:
            raise SpreadError("The contact graph must hold at least one tradition, got none.")
        if not 0.0 < self.turnover <= 1.0:
            raise SpreadError(
                f"`turnover` must be above 0 and at most 1, got {self.turnover}. "
                "Give gains per loss, for instance 0.9."
            )
        if (
            len(self.shares) != 3
            or not all(0.0 <= s <= 1.0 for s in self.shares)
            or abs(sum(self.shares) - 1.0) > 1e-9
        ):
            raise SpreadError(
                "`shares` must be three numbers from 0 to 1 (emergence, contact, inheritance) "
                f"that sum to 1, got {self.shares}."
            )
        if not 1.0 <= self.reach < np.inf:
            raise SpreadError(f"`reach` must be a number from 1 up, got {self.reach}.")
        if self.spill not in {"emergence", "transmission"}:
            raise SpreadError(f"`spill` must be emergence or transmission, got {self.spill!r}.")
        for name, values, top in (
            ("propensity", self.propensity, np.inf),
            ("recorded", self.recorded, 1.0),
        ):
            if values is None:
                continue
            array = np.asarray(values)
            good = array.shape == (n,) and bool(np.all(np.isfinite(array) & (array >= 0.0)))
            if not good or bool(np.any(array > top)) or not bool(np.any(array > 0.0)):
                raise SpreadError(
                    f"`{name}` must be {n} numbers from 0 to {top}, not all 0, one per tradition."
                )
        if self.family is not None and np.asarray(self.family).shape != (n,):
            raise SpreadError(f"`family` must be {n} codes, one per tradition.")

    @cached_property
    def family_codes(self) -> IntArray:
        """(N,) int32 codes 0 .. F - 1, every code used."""
        if self.family is None:
            return np.arange(self.graph.n, dtype=np.int32)
        return np.unique(self.family, return_inverse=True)[1].astype(np.int32)


def cap_for(model: SpreadModel, largest: int) -> int:
    """Count up to which walks go under the h-transform, from the catalogue's largest count.

    With complete recording it is ``largest``. With recording it is the expected number of true
    holders given ``largest`` recorded ones, n / (1 - x (1 - r)) at the mean recording probability r
    (thinned log-series), rounded up; at most N. The cap is a matter of cost alone: every cap gives
    the same law. It is set by the catalogue, never by the motif asked for, so that a motif alone
    and in the batch get the same draws.
    """
    if not 1 <= largest <= model.graph.n:
        raise SpreadError(
            f"The largest count must be a whole number from 1 to {model.graph.n}, got {largest}."
        )
    if model.recorded is None:
        return largest
    lost = model.turnover * (1.0 - float(np.mean(model.recorded)))
    return max(1, min(model.graph.n, int(np.ceil(largest / (1.0 - lost) - 1e-9))))


@dataclass(frozen=True)
class ChainTables:
    """A model laid out for the kernels; arrays are read-only, with m from 0 to N.

    ``power[k]`` is x**k; ``hold[m]`` the mean holding time with m holders; ``scale_before[m]`` is
    ``hold[m] (1 - x**cap) / (1 - x**m)``, which times ``power[m - n]`` is the weight of a visit
    before ``cap``; ``up_before`` and ``up_after`` the probability that the next event is a gain.
    ``family_members`` is empty when inheritance has no share.
    """

    n: int
    indptr: IntArray
    indices: IntArray
    max_degree: int
    cumulative: FloatArray
    family: IntArray
    n_families: int
    family_start: IntArray
    family_members: IntArray
    recorded_rate: FloatArray
    shares: FloatArray
    onward: float
    spill: bool
    cap: int
    up_before: FloatArray
    up_after: FloatArray
    scale_before: FloatArray
    hold: FloatArray
    power: FloatArray


def chain_tables(model: SpreadModel, cap: int) -> ChainTables:
    """Lay a model out for the kernels (``cap`` from 1 to N)."""
    n, x = model.graph.n, model.turnover
    if not 1 <= cap <= n:
        raise SpreadError(f"`cap` must be a whole number from 1 to {n}, got {cap}.")
    m = np.arange(n + 1, dtype=np.float64)
    # 1 - x**m without cancellation near x = 1; its limit ratio at x = 1 is that of m.
    gone = -np.expm1(m * np.log(x)) if x < 1.0 else m.copy()
    hold = np.zeros(n + 1)
    hold[1:] = 1.0 / (m[1:] * (1.0 + x))
    hold[n] = 1.0 / n
    up_after = np.full(n + 1, x / (1.0 + x))
    up_after[[0, n]] = 0.0
    up_before = np.zeros(n + 1)
    up_before[1:n] = gone[2:] / ((1.0 + x) * gone[1:n])
    scale = np.zeros(n + 1)
    scale[1:] = hold[1:] * gone[cap] / gone[1:]
    propensity = np.ones(n) if model.propensity is None else np.asarray(model.propensity, float)
    codes = model.family_codes
    n_families = int(codes.max()) + 1
    sizes = np.bincount(codes, minlength=n_families)
    kin = model.shares[2] > 0.0
    tables = ChainTables(
        n=n,
        indptr=model.graph.indptr,
        indices=model.graph.indices,
        max_degree=max(1, int(model.graph.degree.max())),
        cumulative=np.cumsum(propensity / propensity.sum()),
        family=codes,
        n_families=n_families,
        family_start=np.concatenate([[0], np.cumsum(sizes)]).astype(np.int32),
        family_members=np.argsort(codes, kind="stable").astype(np.int32)[: n if kin else 0],
        recorded_rate=np.zeros(0) if model.recorded is None else np.array(model.recorded, float),
        shares=np.array(model.shares),
        onward=1.0 - 1.0 / model.reach,
        spill=model.spill == "transmission",
        cap=cap,
        up_before=up_before,
        up_after=up_after,
        scale_before=scale,
        hold=hold,
        power=x**m,
    )
    for value in vars(tables).values():
        if isinstance(value, np.ndarray):
            value.flags.writeable = False
    return tables


@dataclass(frozen=True)
class Snapshots:
    """Kept visits of some walks: one per walk and count, K counts.

    Parameters
    ----------
    counts : (K,) int32
        Recorded counts, increasing.
    bits : (walks, K, ceil(N / 64)) uint64
        Recorded holders: tradition i is bit ``i & 63`` of word ``i >> 6``.
    weight : (walks, K) float64
        The walk's total weight for the count; 0 when it was never visited (no snapshot then).
    gains : (walks, K, 3) int64
        Gains by emergence, contact and inheritance up to the kept visit (realised routes).
    visits : (walks, K) int64
        Visits to states with fewer than N holders, up to and with the kept one (with ``gains``,
        what reweighting to another turnover needs).
    """

    counts: IntArray
    bits: npt.NDArray[np.uint64]
    weight: FloatArray
    gains: npt.NDArray[np.int64]
    visits: npt.NDArray[np.int64]

    def holders(self, walk: int, slot: int) -> IntArray:
        """Sorted recorded holders of one kept visit."""
        words = np.ascontiguousarray(self.bits[walk, slot]).astype("<u8").view(np.uint8)
        return np.flatnonzero(np.unpackbits(words, bitorder="little")).astype(np.int32)

    def summaries(self, tables: ChainTables) -> IntArray:
        """(walks, K, 5) int32 of :data:`STATISTICS`; zeros where the weight is 0."""
        out = np.zeros((*self.weight.shape, len(STATISTICS)), dtype=np.int32)
        summary_kernel(
            self.bits,
            self.counts,
            self.weight,
            tables.indptr,
            tables.indices,
            tables.family,
            tables.n_families,
            out,
        )
        return out


def walk_chunk(
    tables: ChainTables, words: npt.NDArray[np.uint64], counts: npt.NDArray[np.int32]
) -> Snapshots:
    """Run one walk per row of ``words`` ((walks, 3) uint64 seeding words).

    The random numbers a walk reads do not depend on ``counts``: asking for more counts changes
    nothing for the others.
    """
    slot_of = np.full(tables.n + 1, -1, dtype=np.int32)
    slot_of[counts] = np.arange(len(counts), dtype=np.int32)
    slot_of[0] = -1
    shape = (len(words), len(counts))
    out = Snapshots(
        counts=counts,
        bits=np.zeros((*shape, (tables.n + 63) // 64), dtype=np.uint64),
        weight=np.zeros(shape),
        gains=np.zeros((*shape, 3), dtype=np.int64),
        visits=np.zeros(shape, dtype=np.int64),
    )
    walk_kernel(
        words,
        tables.indptr,
        tables.indices,
        tables.max_degree,
        tables.cumulative,
        tables.family,
        tables.family_start,
        tables.family_members,
        tables.recorded_rate,
        tables.shares,
        tables.onward,
        tables.spill,
        tables.cap,
        tables.up_before,
        tables.up_after,
        tables.scale_before,
        tables.hold,
        tables.power,
        slot_of,
        out.bits,
        out.weight,
        out.gains,
        out.visits,
    )
    return out
