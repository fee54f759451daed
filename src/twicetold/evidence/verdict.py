"""The pre-declared verdict table: which worlds are rejected, and what that means.

| emergence-only | ancestry-only | transmission-only | verdict |
|---|---|---|---|
| rejected | rejected | not | contact spread |
| rejected | not | not | contact or ancestry |
| not | either | rejected | parallel emergence |
| rejected | either | rejected | several origins, then spread |
| not | either | not | undecided |
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

CONTACT: Final = "contact spread"
CONTACT_OR_ANCESTRY: Final = "contact or ancestry"
PARALLEL: Final = "parallel emergence"
SEVERAL: Final = "several origins, then spread"
UNDECIDED: Final = "undecided"
VERDICTS: Final = (CONTACT, CONTACT_OR_ANCESTRY, PARALLEL, SEVERAL, UNDECIDED)

#: Below this chance of rejecting a false world, "undecided" is put down to low power.
LOW_POWER: Final = 0.5


@dataclass(frozen=True)
class Grounds:
    """What the verdict on one motif stands on.

    Parameters
    ----------
    emergence, ancestry, transmission : float
        The p or q values the plan judges by; NaN where the world was not computed or has nothing
        to say.
    attainable : float
        Smallest p against the emergence-only world this motif could reach.
    families : bool
        Whether the catalogue names families and the plan uses them.
    transmission_known : bool
        Whether the transmission-only world was computed at all.
    transmission_attainable : float
        Smallest p against the transmission-only world; NaN where not computed.
    power_contact, power_emergence : float
        Chance, at this number of holders, of rejecting the emergence-only world if contact is the
        truth, and the transmission-only world if emergence is; NaN where not computed.
    holders, surveyed : int
    """

    emergence: float
    ancestry: float
    transmission: float
    attainable: float
    families: bool
    transmission_known: bool
    transmission_attainable: float = math.nan
    power_contact: float = math.nan
    power_emergence: float = math.nan
    holders: int = 2
    surveyed: int = 3


def verdict(grounds: Grounds, alpha: float) -> tuple[str, str]:
    """Give the verdict and the reason in words.

    Parameters
    ----------
    grounds : Grounds
    alpha : float
        Level of each test.

    Returns
    -------
    verdict, reason : str
    """
    clustered = grounds.emergence <= alpha  # NaN compares false: unknown is never a rejection
    across = grounds.ancestry <= alpha
    scattered = grounds.transmission <= alpha
    if clustered and scattered:
        return SEVERAL, (
            "clustered more than emergence alone gives, yet in too many strands for one origin"
        )
    if scattered:
        return PARALLEL, "in too many strands for one origin, and no more clustered than chance"
    if clustered and across:
        return CONTACT, "clustered, also between families" + _unexamined(grounds)
    if clustered:
        why = (
            "clustered, but no more between families than shared ancestry gives"
            if grounds.families and not math.isnan(grounds.ancestry)
            else "clustered; no family tells contact from shared ancestry here"
            if grounds.families
            else "clustered; without families, shared ancestry could not be examined"
        )
        return CONTACT_OR_ANCESTRY, why + _unexamined(grounds)
    return UNDECIDED, _why_undecided(grounds, alpha)


def _unexamined(grounds: Grounds) -> str:
    return "" if grounds.transmission_known else "; whether one origin suffices was not examined"


def _why_undecided(grounds: Grounds, alpha: float) -> str:
    if grounds.holders == 0:
        return "nobody holds it"
    if grounds.holders == 1:
        return "too rare: one holder"
    if grounds.holders == grounds.surveyed:
        return "everybody searched holds it"
    if grounds.attainable > alpha:
        return "too rare to tell"
    if not grounds.transmission_known:
        return "no more clustered than emergence gives; whether contact fits was not examined"
    powers = (grounds.power_contact, grounds.power_emergence)
    if any(power < LOW_POWER for power in powers):
        return "low power: so few holders could rarely tell the worlds apart"
    return "emergence and transmission both fit"
