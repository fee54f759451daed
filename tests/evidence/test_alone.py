"""Which worlds reproduce how much of a catalogue."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from twicetold.evidence.alone import worlds_alone

NAN = float("nan")


def frame(*rows):
    return pd.DataFrame(
        rows, columns=["p_against_emergence", "q_against_emergence", "p_against_contact"]
    )


def test_counts_are_those_of_a_cross_table():
    rng = np.random.default_rng(0)
    motifs = frame(*rng.uniform(0, 0.2, (300, 3)))
    table, said = worlds_alone(motifs, 0.05)
    seen = pd.crosstab(motifs["p_against_emergence"] > 0.05, motifs["p_against_contact"] > 0.05)
    cells = table.set_index(["emergence_only", "contact_only"])["motifs"]
    words = {True: "fits", False: "rejected"}
    for emergence in (True, False):
        for contact in (True, False):
            expected = seen.loc[emergence, contact]
            assert cells[words[emergence], words[contact]] == expected
    assert table["share"].sum() == pytest.approx(1.0)
    assert f"contact alone reproduces {seen[True].sum()} " in said
    assert f"emergence alone {seen.loc[True].sum()} " in said


def test_a_p_at_the_level_is_a_rejection_and_untold_motifs_do_not_count():
    table, said = worlds_alone(
        frame((0.05, 0.1, 0.5), (0.5, NAN, 0.5), (0.5, 0.5, NAN), (NAN, 0.5, 0.5)), 0.05
    )
    assert table["motifs"].tolist() == [0, 0, 1, 0]
    assert said.startswith("Of 1 testable motif, contact alone reproduces 1 and emergence alone 0 ")


def test_nothing_to_tell():
    table, said = worlds_alone(frame((0.5, NAN, 0.5)), 0.05)
    assert said == ""
    assert table["motifs"].sum() == 0
    assert table["share"].sum() == 0.0
