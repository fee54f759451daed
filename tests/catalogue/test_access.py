"""Withheld rows appear nowhere: no field, message, hash or written table."""

from __future__ import annotations

import dataclasses
import hashlib

import pytest
from small_catalogue import write_csv, write_xlsx

from twicetold.catalogue import CatalogueRules, check_catalogue, read_catalogue, write_catalogue

SECRET = "zq_hidden_place"
SECRET_MOTIF = "zq_hidden_tale"


def hide(tables, mark="withheld"):
    """The same catalogue with a withheld tradition, a withheld motif, and rows that name them."""
    tables["traditions"].insert(
        3, [SECRET, "Zq Name", "-1.5", "10", "Zqfam", "0", mark, "nonsense"]
    )
    tables["motifs"].insert(2, [SECRET_MOTIF, "=Zq tale", "zqcat", mark])
    tables["attestations"].insert(1, ["m1", SECRET, ""])
    tables["attestations"].insert(3, [SECRET_MOTIF, "t1", ""])
    tables["attestations"].append([SECRET_MOTIF, SECRET, ""])
    return tables


def everything(catalogue) -> str:
    return repr([getattr(catalogue, f.name) for f in dataclasses.fields(catalogue)])


def test_withheld_rows_leave_no_trace(sound, put, tmp_path):
    plain = read_catalogue(put(sound, tmp_path / "a"))
    hidden = read_catalogue(put(hide(sound), tmp_path / "b"))
    assert hidden.digest() == plain.digest()
    assert (hidden.withheld_traditions, hidden.withheld_motifs) == (1, 1)
    assert "zq" not in everything(hidden).casefold()
    assert hidden.warnings == ()


def test_hash_of_the_files_is_not_kept(sound, put, tmp_path):
    plain = read_catalogue(put(sound, tmp_path / "a"))
    path = put(hide(sound), tmp_path / "b")
    hidden = read_catalogue(path)
    files = [path] if path.is_file() else sorted(path.iterdir())
    revealing = {hashlib.sha256(p.read_bytes()).hexdigest() for p in files}
    assert not revealing & {s.sha256 for s in hidden.sources}
    assert not {p.stat().st_size for p in files} & {s.size for s in hidden.sources}
    assert [s.sha256 for s in hidden.sources] == [plain.digest()]
    assert {s.sha256 for s in plain.sources} == {
        hashlib.sha256(p.read_bytes()).hexdigest()
        for p in ([tmp_path / "a"] if (tmp_path / "a").is_file() else (tmp_path / "a").iterdir())
    }


def test_hash_does_not_change_with_what_is_withheld(sound, tmp_path):
    one = hide(sound)
    first = read_catalogue(write_csv(one, tmp_path / "a"))
    one["traditions"][3][1] = "Zq other name"
    second = read_catalogue(write_csv(one, tmp_path / "b"))
    assert first.sources == second.sources


@pytest.mark.parametrize(
    "fault",
    [
        lambda t: t["attestations"].append(["m1", "t77", ""]),
        lambda t: t["attestations"].append(["m77", SECRET, ""]),
        lambda t: t["attestations"].append(["m1", f" {SECRET} ", ""]),
        lambda t: t["attestations"].append(["m77", f" {SECRET} ", ""]),
        lambda t: t["attestations"].append(["m1", SECRET.upper(), ""]),
        lambda t: t["attestations"].append(["m1", SECRET + "s", ""]),
        lambda t: t["attestations"].append([SECRET_MOTIF + " ", "t77", ""]),
        lambda t: t["traditions"].append([SECRET, "Zq twice", "3", "4", "", "1", "", ""]),
        lambda t: t["traditions"][3].__setitem__(6, "witheld"),
        lambda t: t["traditions"][0].__setitem__(6, "acces"),
        lambda t: t["traditions"][0].__setitem__(6, "protection"),
        lambda t: t["motifs"][0].__setitem__(3, "protection"),
        lambda t: t["traditions"][1].__setitem__(2, "north"),
        lambda t: t.__setitem__("contacts", [["tradition_id", "neighbour_id"], ["t1", SECRET]]),
        lambda t: t.__setitem__("surveyed", [["motif_id", "tradition_id"], [SECRET_MOTIF, SECRET]]),
    ],
)
def test_no_message_names_withheld_rows(sound, put, tmp_path, fault):
    tables = hide(sound)
    fault(tables)
    catalogue, problems = check_catalogue(put(tables, tmp_path))
    said = " ".join(map(str, problems))
    assert "zq" not in said.casefold()
    if catalogue is not None:
        assert "zq" not in everything(catalogue).casefold()


def test_ragged_withheld_row_is_not_named(sound, tmp_path):
    folder = write_csv(hide(sound), tmp_path)
    path = folder / "traditions.csv"
    path.write_text(path.read_text().replace(",nonsense", ""))
    _, problems = check_catalogue(folder)
    assert [p.row for p in problems] == [4]
    assert "zq" not in " ".join(map(str, problems)).casefold()


@pytest.mark.parametrize("transposed", [False, True])
def test_withheld_column_or_row_of_a_matrix(sound, put, tmp_path, transposed):
    tables = {"traditions": hide(sound)["traditions"]}
    rows = [["motif_id", "t1", SECRET, "t2"], ["m1", "1", "?!", "0"], ["m2", "0", "1", "1"]]
    if transposed:
        rows = [list(r) for r in zip(*rows, strict=True)]
        rows[0][0] = "tradition_id"
    tables["matrix"] = rows
    catalogue = read_catalogue(put(tables, tmp_path))
    assert "zq" not in everything(catalogue).casefold()
    assert catalogue.states(0).tolist() == [2, 1, 0, 0]


def test_repeated_withheld_column_is_not_named(sound, put, tmp_path):
    tables = {"traditions": hide(sound)["traditions"]}
    tables["matrix"] = [["motif_id", SECRET, SECRET], ["m1", "1", "1"]]
    _, problems = check_catalogue(put(tables, tmp_path))
    assert problems
    assert "zq" not in " ".join(map(str, problems)).casefold()


def test_motif_known_only_from_withheld_traditions_is_not_listed(sound, put, tmp_path):
    tables = hide(sound)
    del tables["motifs"]
    tables["attestations"] = [
        r for r in tables["attestations"] if r[0] != SECRET_MOTIF or r[1] == SECRET
    ]
    catalogue = read_catalogue(put(tables, tmp_path))
    assert catalogue.motif_ids == ("m1", "m2", "m3")


def test_restricted_rows_enter_only_when_asked(sound, put, tmp_path):
    path = put(hide(sound, "restricted"), tmp_path)
    out = read_catalogue(path)
    assert "zq" not in everything(out).casefold()
    assert (out.restricted_traditions, out.restricted_motifs) == (1, 1)
    assert (out.withheld_traditions, out.withheld_motifs) == (0, 0)
    _, problems = check_catalogue(path, CatalogueRules(restricted=True))
    assert any("greater than 0" in p.what for p in problems)  # now its effort counts


def test_restricted_rows_are_not_named_in_warnings(sound, put, tmp_path):
    tables = hide(sound, "restricted")
    tables["traditions"][3][5] = "2"
    tables["motifs"][2][1] = "Zq tale"
    tables["attestations"] = [r for r in tables["attestations"] if r[0] != SECRET_MOTIF]
    catalogue = read_catalogue(put(tables, tmp_path), CatalogueRules(restricted=True))
    assert catalogue.access.count("restricted") == 1
    assert catalogue.warnings
    assert "zq" not in " ".join(map(str, catalogue.warnings)).casefold()


def test_written_copy_holds_nothing_withheld(sound, tmp_path):
    catalogue = read_catalogue(write_xlsx(hide(sound), tmp_path / "a"))
    folder = write_catalogue(catalogue, tmp_path / "copy")
    assert b"zq" not in b"".join(p.read_bytes().lower() for p in folder.iterdir())


def test_withdrawing_a_withheld_id_says_nothing(sound, put, tmp_path):
    path = put(hide(sound), tmp_path)
    assert read_catalogue(path, CatalogueRules(without=(SECRET,))).n_traditions == 4
