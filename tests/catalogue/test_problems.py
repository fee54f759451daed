"""Each fault has its own message with file, row, column and remedy, in CSV and workbook alike."""

from __future__ import annotations

import pytest
from small_catalogue import Tables, write_csv, write_xlsx

from twicetold.catalogue import CatalogueRules, check_catalogue, read_catalogue
from twicetold.errors import CatalogueError, Problem

# what is changed, and what is then said: table, row, column, words of the message
Change = tuple[str, int, int, str]
ERRORS: dict[str, tuple[list[Change], str, int, str, str]] = {
    "swapped": ([("traditions", 2, 3, "120"), ("traditions", 2, 4, "45")],
                "traditions", 2, "latitude", "look swapped"),
    "latitude": ([("traditions", 3, 3, "91"), ("traditions", 3, 4, "95")],
                 "traditions", 3, "latitude", "outside -90 to 90"),
    "longitude": ([("traditions", 3, 4, "200")], "traditions", 3, "longitude", "Write -160"),
    "far longitude": ([("traditions", 3, 4, "2000")], "traditions", 3, "longitude", "outside"),
    "decimal comma": ([("traditions", 2, 3, "52,5")], "traditions", 2, "latitude", "comma"),
    "minus": ([("traditions", 2, 3, "−12.5")], "traditions", 2, "latitude", "minus sign"),
    "degrees": ([("traditions", 2, 3, "12°30'N")], "traditions", 2, "latitude", "decimal degrees"),
    "words": ([("traditions", 2, 4, "west")], "traditions", 2, "longitude", "not a number"),
    "underscore": ([("traditions", 2, 4, "1_0")], "traditions", 2, "longitude", "not a number"),
    "infinite": ([("traditions", 2, 4, "1e999")], "traditions", 2, "longitude", "not a number"),
    "not finite": ([("traditions", 2, 4, "nan")], "traditions", 2, "longitude", "not a number"),
    "formula": ([("traditions", 2, 4, "=A1+1")], "traditions", 2, "longitude", "is a formula"),
    "half": ([("traditions", 2, 4, "")], "traditions", 2, "longitude", "no longitude"),
    "effort": ([("traditions", 4, 6, "0")], "traditions", 4, "effort", "greater than 0"),
    "negative effort": ([("traditions", 4, 6, "-3")], "traditions", 4, "effort", "greater than 0"),
    "no effort": ([("traditions", 4, 6, "")], "traditions", 4, "effort", "no effort"),
    "effort word": ([("traditions", 4, 6, "much")], "traditions", 4, "effort", "not a number"),
    "no id": ([("traditions", 5, 1, "")], "traditions", 5, "tradition_id", "has no id"),
    "long id": ([("traditions", 6, 1, "x" * 201)], "traditions", 6, "tradition_id", "201 char"),
    "twice": ([("traditions", 6, 1, "t3")], "traditions", 6, "tradition_id", "stands in row 4"),
    "motif twice": ([("motifs", 4, 1, "m2")], "motifs", 4, "motif_id", "stands in row 3"),
    "star": ([("motifs", 4, 1, "*")], "motifs", 4, "motif_id", "every motif"),
    "control": ([("motifs", 2, 2, "a\u202eb")], "motifs", 2, "name", "U+202E"),
    "control id": ([("traditions", 6, 1, "a\x85b")], "traditions", 6, "tradition_id", "U+0085"),
    "access": ([("motifs", 2, 4, "secret")], "motifs", 2, "access", "no kind of access"),
    "motif": ([("attestations", 3, 1, "M1")], "attestations", 3, "motif_id", "Did you mean 'm1'"),
    "tradition": ([("attestations", 3, 2, "t9")], "attestations", 3, "tradition_id", "'t9'"),
    "misspelt": ([("traditions", 1, 3, "latitud")], "traditions", 1, "latitude", "'latitud'"),
    "no column": ([("attestations", 1, 2, "place")], "attestations", 1, "tradition_id", "column"),
    "same column": ([("motifs", 1, 3, "name")], "motifs", 1, "", "same name"),
    "acess": ([("traditions", 1, 7, "acess")], "traditions", 1, "", "almost like 'access'"),
    "other access": ([("traditions", 1, 7, "note"), ("traditions", 2, 7, "withheld")],
                     "traditions", 1, "", "holds the mark 'withheld'"),
}  # fmt: skip
WARNINGS: dict[str, tuple[list[Change], str, int, str, str]] = {
    "origin": ([("traditions", 2, 3, "0"), ("traditions", 2, 4, "0")],
               "traditions", 2, "", "0, longitude 0"),
    "same place": ([("traditions", 4, 3, "-1.5"), ("traditions", 4, 4, "10")],
                   "traditions", 4, "", "same point as row 2"),
    "formula name": ([("traditions", 2, 2, "=Oru")], "traditions", 2, "name", "formula"),
    "formula id": ([("motifs", 2, 2, "@boat")], "motifs", 2, "name", "formula"),
    "padded": ([("motifs", 2, 1, " m1")], "motifs", 2, "motif_id", "blanks around"),
    "padded pair": ([("attestations", 2, 1, "m1 ")], "attestations", 2, "motif_id", "blanks"),
    "same": ([("attestations", 3, 2, "t1")], "attestations", 3, "", "repeats row 2"),
    "nobody": ([("attestations", 5, 1, "m1")], "attestations", 0, "", "'m2' is attested in no"),
    "covariate": ([("traditions", 3, 8, "wet")], "traditions", 3, "rain", "left out"),
    "blank effort": ([("traditions", k, 6, "") for k in range(2, 7)],
                     "traditions", 0, "effort", "blank"),
}  # fmt: skip


def changed(tables: Tables, changes: list[Change]) -> Tables:
    for name, row, column, text in changes:
        tables[name][row - 1][column - 1] = text
    return tables


def matching(problems: tuple[Problem, ...], table: str, row: int, column: str, words: str):
    return [
        p
        for p in problems
        if table in p.file
        and p.row == row
        and p.column == column
        and words in f"{p.what} {p.remedy}"
    ]


@pytest.mark.parametrize("fault", ERRORS)
def test_error_names_place_and_remedy(fault, sound, put, tmp_path):
    changes, table, row, column, words = ERRORS[fault]
    catalogue, problems = check_catalogue(put(changed(sound, changes), tmp_path))
    assert catalogue is None
    found = matching(problems, table, row, column, words)
    assert len(found) == 1, problems
    assert found[0].remedy
    assert str(tmp_path) not in str(found[0])


@pytest.mark.parametrize("fault", WARNINGS)
def test_warning_names_place_and_remedy(fault, sound, put, tmp_path):
    changes, table, row, column, words = WARNINGS[fault]
    catalogue, problems = check_catalogue(put(changed(sound, changes), tmp_path))
    assert catalogue is not None, problems
    found = matching(problems, table, row, column, words)
    assert len(found) == 1, problems
    assert found[0].remedy
    assert problems == catalogue.warnings


@pytest.mark.parametrize("fault", ERRORS | WARNINGS)
def test_csv_and_workbook_say_the_same(fault, sound, tmp_path):
    changes = (ERRORS | WARNINGS)[fault][0]
    tables = changed(sound, changes)
    _, one = check_catalogue(write_csv(tables, tmp_path / "a"))
    _, two = check_catalogue(write_xlsx(tables, tmp_path / "b"))

    def bare(problems):
        names = {"[": "", "]": "", "catalogue.xlsx": "", ".csv": ""}
        out = []
        for p in problems:
            words = f"{p.file}|{p.row}|{p.column}|{p.what}|{p.remedy}"
            for old, new in names.items():
                words = words.replace(old, new)
            out.append(words)
        return sorted(out)

    assert bare(one) == bare(two)


def test_everybody_holds_it(sound, put, tmp_path):
    sound["attestations"] += [["m1", "t3", ""], ["m1", "t4", ""]]
    catalogue, problems = check_catalogue(put(sound, tmp_path))
    assert catalogue is not None
    assert ["attested in all 4 traditions" in p.what for p in problems] == [True]


def test_contradicting_states_are_an_error(sound, put, tmp_path):
    sound["attestations"] = [
        ["motif_id", "tradition_id", "state"],
        ["m1", "t1", "attested"],
        ["m2", "t2", "attested"],
        ["m1", "t1", "absent"],
        ["m3", "t1", "perhaps"],
    ]
    _, problems = check_catalogue(put(sound, tmp_path))
    assert [(p.row, p.column) for p in problems] == [(4, ""), (5, "state")]
    assert "row 2" in problems[0].what


@pytest.mark.parametrize("kept", [0, 1])
def test_too_few_traditions(sound, put, tmp_path, kept):
    for row in sound["traditions"][1 + kept :]:
        row[2] = row[3] = ""
    _, problems = check_catalogue(put(sound, tmp_path))
    wanted = ["No tradition has", "Only one tradition has"][kept]
    assert any(wanted in p.what for p in problems)


def test_all_at_one_place(sound, put, tmp_path):
    for row in sound["traditions"][1:]:
        row[2], row[3] = "5", "6"
    _, problems = check_catalogue(put(sound, tmp_path))
    assert any("stand at one point" in p.what for p in problems)


@pytest.mark.parametrize("table", ["traditions", "attestations"])
def test_missing_table(sound, put, tmp_path, table):
    del sound[table]
    _, problems = check_catalogue(put(sound, tmp_path))
    assert any(table in f"{p.what} {p.remedy}" for p in problems)


@pytest.mark.parametrize("table", ["traditions", "motifs", "attestations"])
@pytest.mark.parametrize("rows", [0, 1])
def test_empty_table(sound, put, tmp_path, table, rows):
    sound[table] = sound[table][:rows]
    catalogue, problems = check_catalogue(put(sound, tmp_path))
    assert catalogue is None
    assert any(table in p.file for p in problems)


def test_two_kinds_of_presence(sound, put, tmp_path):
    sound["matrix"] = [["motif_id", "t1"], ["m1", "1"]]
    _, problems = check_catalogue(put(sound, tmp_path))
    assert any("both attestations and a matrix" in p.what for p in problems)


def test_matrix_faults(sound, put, tmp_path):
    tables = {k: sound[k] for k in ("traditions", "motifs")}
    tables["matrix"] = [
        ["motif_id", "t1", "t2", "t8"],
        ["m1", "1", "x", "1"],
        ["m9", "1", "0", "1"],
        ["m1", "1", "0", "1"],
    ]
    _, problems = check_catalogue(put(tables, tmp_path))
    assert sorted((p.row, p.column) for p in problems) == [
        (1, ""),
        (2, "t2"),
        (3, ""),
        (4, "motif_id"),
    ]


def test_contact_faults(sound, put, tmp_path):
    sound["contacts"] = [["tradition_id", "neighbour_id"], ["t1", "t1"], ["t1", "t7"]]
    _, problems = check_catalogue(put(sound, tmp_path))
    assert [p.row for p in problems] == [2, 3]


def test_ragged_rows(sound, tmp_path):
    folder = write_csv(sound, tmp_path)
    path = folder / "attestations.csv"
    path.write_text(path.read_text() + "m1,t3\nm1,t3,,extra\n")
    _, problems = check_catalogue(folder)
    assert [(p.row, "cells where the header has 3" in p.what) for p in problems] == [
        (8, True),
        (9, True),
    ]


def test_long_cell(sound, tmp_path):
    sound["motifs"][1][1] = "x" * 32_768  # a sheet cannot hold as much
    _, problems = check_catalogue(write_csv(sound, tmp_path))
    assert [(p.row, p.column) for p in problems] == [(2, "name")]


def test_ragged_row_in_a_sheet(sound, tmp_path):
    sound["attestations"].append(["m1", "t3", "", "stray"])
    _, problems = check_catalogue(write_xlsx(sound, tmp_path))
    assert [p.row for p in problems] == [8]


@pytest.mark.parametrize(
    ("raw", "words"),
    [
        ("Orú".encode("latin-1"), "byte 70 of the file is 0xFA"),
        ("Orú".encode("utf-16"), "0x"),
        (b"Or\x00u", "NUL byte"),
        (b'"Oru', "quotation mark"),
        (b'"O"ru', "quotation mark"),
        (b'"' + b"x" * 200_000 + b'"', "too long"),
    ],
)
def test_bytes_that_are_no_table(sound, tmp_path, raw, words):
    folder = write_csv(sound, tmp_path)
    path = folder / "traditions.csv"
    path.write_bytes(path.read_bytes().replace(b"Oru", raw))
    _, problems = check_catalogue(folder)
    (problem,) = [p for p in problems if p.file == "traditions.csv"]
    assert problem.row == 2
    assert words in problem.what
    assert problem.remedy


def test_utf16_is_recognised(sound, tmp_path):
    folder = write_csv(sound, tmp_path)
    path = folder / "motifs.csv"
    path.write_bytes(path.read_text().encode("utf-16"))
    _, problems = check_catalogue(folder)
    assert ["UTF-16" in p.what for p in problems] == [True]


def test_many_problems_of_one_kind_are_counted(sound, put, tmp_path):
    sound["attestations"] += [["m1", f"x{k}", ""] for k in range(332)]
    _, problems = check_catalogue(put(sound, tmp_path))
    assert len(problems) == 21
    assert "312 more of this kind" in problems[-1].what
    assert problems[-1].row == 28


def test_all_problems_come_together(sound, put, tmp_path):
    sound["traditions"][1][2] = "x"
    sound["motifs"].append(["m2", "again", "", ""])
    sound["attestations"][2][1] = "t9"
    with pytest.raises(CatalogueError) as caught:
        read_catalogue(put(sound, tmp_path))
    assert len(caught.value.problems) == 3
    assert caught.value.problems == tuple(sorted(caught.value.problems))


@pytest.mark.parametrize("name", ["gone", "traditions.csv", "old.xls", "notes.txt", "x.json"])
def test_path_that_is_no_catalogue(sound, tmp_path, name):
    write_csv(sound, tmp_path)
    if name not in ("gone", "traditions.csv"):
        (tmp_path / name).write_text("{}")
    _, problems = check_catalogue(tmp_path / name)
    assert len(problems) == 1
    assert problems[0].remedy


def test_empty_folder_and_folder_in_place_of_a_table(sound, tmp_path):
    (tmp_path / "empty").mkdir()
    assert check_catalogue(tmp_path / "empty")[0] is None
    folder = write_csv(sound, tmp_path / "b")
    (folder / "motifs.csv").unlink()
    (folder / "motifs.csv").mkdir()
    _, problems = check_catalogue(folder)
    assert [p.file for p in problems] == ["motifs.csv"]


def test_same_table_twice(sound, tmp_path):
    write_csv(sound, tmp_path)
    write_csv({"motifs": sound["motifs"]}, tmp_path, ".tsv")
    _, problems = check_catalogue(tmp_path)
    assert "motifs.csv, motifs.tsv" in problems[0].what


def test_plan_names_a_column_that_is_not_there(sound, put, tmp_path):
    _, problems = check_catalogue(put(sound, tmp_path), CatalogueRules(effort="efort"))
    assert len(problems) == 1
    assert "'effort'" in problems[0].remedy


@pytest.mark.parametrize(
    "text",
    ["title = ", "title = 3", 'invented = "perhaps"', "a" * 2_000_000, "\xff", "t=" + "[" * 9999],
)
def test_faulty_about(sound, tmp_path, text):
    folder = write_csv(sound, tmp_path)
    (folder / "about.toml").write_bytes(text.encode("latin-1"))
    catalogue, problems = check_catalogue(folder)
    assert catalogue is None
    assert [p.file for p in problems] == ["about.toml"]


@pytest.mark.parametrize("text", ["[]", "{", '{"type": "Topology"}', "[" * 100_000, "\xff"])
def test_faulty_land(sound, tmp_path, text):
    folder = write_csv(sound, tmp_path)
    (folder / "land.geojson").write_bytes(text.encode("latin-1"))
    _, problems = check_catalogue(folder)
    assert [p.file for p in problems] == ["land.geojson"]
