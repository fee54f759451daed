"""The verdict table, line by line (design of the project, section 7)."""

from __future__ import annotations

import itertools
import math

import pytest

from twicetold.evidence import verdict as v
from twicetold.evidence.verdict import Grounds, verdict

BASE = {
    "attainable": 0.001,
    "families": True,
    "transmission_known": True,
    "transmission_attainable": 0.001,
    "power_contact": 0.9,
    "power_emergence": 0.9,
    "holders": 12,
    "surveyed": 100,
}


def judge(emergence, ancestry, transmission, **other):
    return verdict(
        Grounds(emergence=emergence, ancestry=ancestry, transmission=transmission, **BASE | other),
        0.05,
    )


@pytest.mark.parametrize(
    ("emergence", "ancestry", "transmission", "expected"),
    [
        (0.01, 0.01, 0.5, v.CONTACT),
        (0.01, 0.5, 0.5, v.CONTACT_OR_ANCESTRY),
        (0.5, 0.5, 0.01, v.PARALLEL),
        (0.5, 0.01, 0.01, v.PARALLEL),
        (0.01, 0.01, 0.01, v.SEVERAL),
        (0.01, 0.5, 0.01, v.SEVERAL),
        (0.5, 0.5, 0.5, v.UNDECIDED),
        (0.5, 0.01, 0.5, v.UNDECIDED),
    ],
)
def test_every_line_of_the_table(emergence, ancestry, transmission, expected):
    assert judge(emergence, ancestry, transmission)[0] == expected


def test_the_level_itself_rejects_and_just_above_does_not():
    assert judge(0.05, 0.05, 1.0)[0] == v.CONTACT
    assert judge(0.0500001, 0.05, 1.0)[0] == v.UNDECIDED


def test_an_unknown_value_never_rejects():
    for emergence, ancestry, transmission in itertools.product((0.01, math.nan), repeat=3):
        got = judge(emergence, ancestry, transmission)[0]
        if math.isnan(emergence) and math.isnan(transmission):
            assert got == v.UNDECIDED
        if math.isnan(transmission):
            assert got not in (v.PARALLEL, v.SEVERAL)
        if math.isnan(ancestry):
            assert got != v.CONTACT


def test_without_families_the_words_say_so():
    got, reason = judge(0.01, math.nan, 0.5, families=False)
    assert got == v.CONTACT_OR_ANCESTRY
    assert "without families" in reason


def test_without_the_transmission_world_the_words_say_so():
    _, reason = judge(0.01, 0.01, math.nan, transmission_known=False)
    assert "not examined" in reason


@pytest.mark.parametrize(
    ("other", "words"),
    [
        ({"holders": 0}, "nobody"),
        ({"holders": 1}, "one holder"),
        ({"holders": 100}, "everybody"),
        ({"attainable": 0.2}, "too rare"),
        ({"power_contact": 0.2}, "low power"),
        ({"power_emergence": 0.2}, "low power"),
        ({}, "both fit"),
    ],
)
def test_undecided_says_why(other, words):
    got, reason = judge(0.9, 0.9, 0.9, **other)
    assert got == v.UNDECIDED
    assert words in reason
