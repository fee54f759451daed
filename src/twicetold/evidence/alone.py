"""How much of a catalogue one world alone reproduces."""

from __future__ import annotations

import numpy as np
import pandas as pd

#: Column of the table of motifs -> column of the table made here.
WORLDS = {"p_against_emergence": "emergence_only", "p_against_contact": "contact_only"}


def worlds_alone(motifs: pd.DataFrame, alpha: float) -> tuple[pd.DataFrame, str]:
    """Count the motifs that emergence alone, contact alone, either or neither reproduces.

    A world reproduces a motif whose p-value against it is over the level: with emergence alone it
    would be no less clustered, with contact alone no more scattered, than such motifs often are.
    One motif in twenty that a world did make is expected among those it does not reproduce.

    Parameters
    ----------
    motifs : pandas.DataFrame
        Columns ``p_against_emergence``, ``q_against_emergence`` and ``p_against_contact``; rows
        without a q (too rare to tell) or without either p are left out.
    alpha : float
        Level of each test.

    Returns
    -------
    table : pandas.DataFrame
        ``emergence_only, contact_only`` (fits or rejected), ``motifs`` and ``share``; four rows.
    said : str
        The same in a sentence; empty when no motif is left.
    """
    told = motifs.dropna(subset=[*WORLDS, "q_against_emergence"])
    fits = {column: told[p].to_numpy(float) > alpha for p, column in WORLDS.items()}
    rows = []
    for emergence in (True, False):
        for contact in (True, False):
            here = (fits["emergence_only"] == emergence) & (fits["contact_only"] == contact)
            count = int(np.sum(here))
            words = ("fits" if emergence else "rejected", "fits" if contact else "rejected")
            rows.append((*words, count, count / max(len(told), 1)))
    table = pd.DataFrame(rows, columns=[*WORLDS.values(), "motifs", "share"])
    either, emergence_only, contact_only, neither = table["motifs"]
    if not len(told):
        return table, ""
    what = "motif" if len(told) == 1 else "motifs"
    said = (
        f"Of {len(told):,} testable {what}, contact alone reproduces "
        f"{either + contact_only:,} and emergence alone {either + emergence_only:,} "
        f"(p over {alpha:g}): {either:,} either of them, {neither:,} neither."
    )
    return table, said
