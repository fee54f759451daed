"""Results of fixed catalogues are those kept, or CHANGELOG says that they are not."""

from __future__ import annotations

import json
import sys
from pathlib import Path

import pandas as pd
import pytest

sys.path.insert(0, str(Path(__file__).resolve().parent))

import digest
from fixed_catalogues import FIXED, route_shares

KEPT = json.loads(digest.KEPT.read_text(encoding="utf-8"))["results"]


def test_twenty_catalogues_are_kept():
    assert len(FIXED) == 20
    assert set(KEPT) == {*FIXED, "route shares"}


@pytest.mark.parametrize("name", FIXED)
@pytest.mark.filterwarnings("ignore::twicetold.errors.TwicetoldWarning")
def test_no_number_changed_unsaid(name):
    found = digest.digests(FIXED[name].table(), FIXED[name].near)
    said = digest.difference(name, KEPT[name], found)
    if said:
        pytest.fail(digest.complaint([said]), pytrace=False)


def test_no_route_share_changed_unsaid():
    said = digest.difference("route shares", KEPT["route shares"], route_shares())
    if said:
        pytest.fail(digest.complaint([said]), pytrace=False)


# ---- the alarm itself --------------------------------------------------------------------------


@pytest.fixture
def table():
    return pd.DataFrame({"holders": [3, 4], "p": [0.5, 1 / 3], "why": ["a", "b"]})


def test_last_bits_are_no_change(table):
    other = table.assign(p=table["p"] * (1 + 1e-13))
    assert digest.digests(table) == digest.digests(other)


@pytest.mark.parametrize(
    ("column", "value"), [("holders", [3, 5]), ("p", [0.5, 0.333334]), ("why", ["a", "c"])]
)
def test_every_change_is_named(table, column, value):
    kept, found = digest.digests(table), digest.digests(table.assign(**{column: value}))
    assert digest.difference("x", kept, found) == f"x: {column}"
    assert digest.RENEW in digest.complaint(["x"])


def test_order_of_rows_and_new_columns_are_changes(table):
    kept = digest.digests(table)
    assert digest.difference("x", kept, digest.digests(table.iloc[::-1]))
    assert digest.difference("x", kept, digest.digests(table.assign(new=1))) == "x: new"
    reordered = digest.digests(table[["p", "holders", "why"]])
    assert digest.difference("x", kept, reordered) == "x: the order of columns"


def test_fitted_numbers_have_a_tolerance(table):
    kept = digest.digests(table, near=("p",))
    assert "p" not in kept["columns"]
    near = digest.digests(table.assign(p=table["p"] + 0.001), near=("p",))
    far = digest.digests(table.assign(p=table["p"] + 0.1), near=("p",))
    gone = digest.digests(table.assign(p=float("nan")), near=("p",))
    assert digest.difference("x", kept, near) == ""
    assert digest.difference("x", kept, far) == digest.difference("x", kept, gone) == "x: p"


def test_renewing_needs_a_declaration(tmp_path, monkeypatch, capsys):
    old = {"columns": {"p": "1"}, "sha256": "1"}
    new = {"columns": {"p": "2"}, "sha256": "2"}
    changelog, kept = tmp_path / "CHANGELOG.md", tmp_path / "digests.json"
    monkeypatch.setattr(digest, "CHANGELOG", changelog)
    monkeypatch.setattr(digest, "KEPT", kept)
    monkeypatch.setattr(digest, "compute", lambda: {"x": new})
    changelog.write_text("## 1\n### Numerical changes\n- None.\n")
    kept.write_text(json.dumps({"declared": digest.declared(), "results": {"x": old}}))
    assert digest.main(["--renew"]) == 1
    assert "declares nothing new" in capsys.readouterr().out
    changelog.write_text(
        "## 2\n### Numerical changes\n- p.\n## 1\n### Numerical changes\n- None.\n"
    )
    assert digest.main(["--renew"]) == 0
    assert json.loads(kept.read_text())["results"] == {"x": new}
    assert digest.main([]) == 0
