"""Hostile files: every one ends in a catalogue or in problems, never in a traceback or a hang."""

from __future__ import annotations

import io
import json
import os
import resource
import shutil
import tempfile
import time
import zipfile
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from small_catalogue import SOUND, write_csv, write_xlsx

from hostile_counts import counted, took, write_counts
from twicetold.catalogue import Catalogue, CatalogueRules, check_catalogue, limits

SECONDS = 5.0  # of processor time, so that a busy machine fails no test
MEBIBYTE = 1 << 20


@pytest.fixture(scope="module", autouse=True)
def counts(request):
    """Put what a marked run threw into the report."""
    yield
    if request.config.option.markexpr == "calibration":
        write_counts()


def examine(path: Path, rules: CatalogueRules | None = None, reader: str = "") -> str:
    """Read it, hold the reader to its promises, and hand back what it said."""
    start = time.process_time()
    catalogue, problems = check_catalogue(path, rules)
    spent = time.process_time() - start
    assert spent < SECONDS
    if reader:
        took(spent)
        counted(reader, "" if catalogue is not None else "refused")
    assert (catalogue is None) or isinstance(catalogue, Catalogue)
    assert catalogue is not None or problems
    said = "\n".join(map(str, problems))
    assert said.isprintable() or said.replace("\n", "").isprintable()
    said.encode("utf-8")
    assert len(problems) < 2_000
    assert all(len(str(p)) < 2_000 for p in problems)
    assert "could not be read" not in said, said
    assert "Traceback" not in said
    return said


# ---- workbooks -----------------------------------------------------------------------------


def repacked(source: Path, target: Path, change) -> Path:
    """A copy of a workbook with its parts changed by ``change(name, bytes)``."""
    with zipfile.ZipFile(source) as old, zipfile.ZipFile(target, "w", zipfile.ZIP_DEFLATED) as new:
        for part in old.infolist():
            new.writestr(part.filename, change(part.filename, old.read(part)))
    return target


@pytest.fixture
def book(sound, tmp_path) -> Path:
    return write_xlsx(sound, tmp_path / "book")


def test_zip_bomb_is_refused_before_it_is_unpacked(book, tmp_path):
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    path = tmp_path / "bomb.xlsx"
    with zipfile.ZipFile(book) as old, zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as new:
        for part in old.infolist():
            with new.open(part.filename, "w") as out:
                out.write(old.read(part))
                if part.filename == "xl/worksheets/sheet1.xml":
                    for _ in range(64):
                        out.write(b" " * MEBIBYTE)
    assert "unpacks to" in examine(path)
    assert resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before < 200 * 1024


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        (b"<worksheet", b'<!DOCTYPE x [<!ENTITY a "aaaa">]><worksheet', "entities"),
        (b"<worksheet", b"<!-- " + b"x" * MEBIBYTE + b" --><!doctype x><worksheet", "entities"),
        (b"<?xml", b'<?xml version="1.0" encoding="UTF-7"?><?xml', "encoding"),
    ],
)
def test_entities_and_odd_encodings_are_refused(book, tmp_path, old, new, words):
    def change(name: str, data: bytes) -> bytes:
        if name != "xl/worksheets/sheet1.xml":
            return data
        return new + data if old not in data else data.replace(old, new, 1)

    assert words in examine(repacked(book, tmp_path / "x.xlsx", change))


def test_utf16_xml_is_refused(book, tmp_path):
    def change(name: str, data: bytes) -> bytes:
        return data.decode().encode("utf-16") if name.endswith("sheet1.xml") else data

    assert "encoding" in examine(repacked(book, tmp_path / "x.xlsx", change))


@pytest.mark.parametrize("reference", [b"XFD1048576", b"A9999999", b"ZZZ9", b"A0", b"@@", b""])
def test_stray_cells_far_away(book, tmp_path, reference):
    def change(name: str, data: bytes) -> bytes:
        row = b'<row r="99999"><c r="' + reference + b'"><v>1</v></c></row></sheetData>'
        return data.replace(b"</sheetData>", row) if name.endswith("sheet3.xml") else data

    examine(repacked(book, tmp_path / "x.xlsx", change))


def test_claimed_size_of_a_sheet_is_not_believed(book, tmp_path):
    def change(name: str, data: bytes) -> bytes:
        start = data.find(b"<dimension")
        if start < 0:
            return data
        stop = data.index(b"/>", start) + 2
        return data[:start] + b'<dimension ref="A1:XFD1048576"/>' + data[stop:]

    assert examine(repacked(book, tmp_path / "x.xlsx", change)) == ""


@pytest.mark.parametrize("keep", [0, 1, 100, 0.5, 0.9])
def test_cut_off_workbook(book, tmp_path, keep):
    raw = book.read_bytes()
    path = tmp_path / "cut.xlsx"
    path.write_bytes(raw[: int(keep * len(raw)) if isinstance(keep, float) else keep])
    assert "not an .xlsx workbook" in examine(path)


def test_encrypted_and_stuffed_archives(tmp_path):
    path = tmp_path / "many.xlsx"
    with zipfile.ZipFile(path, "w") as archive:
        for k in range(limits.WORKBOOK_PARTS + 1):
            archive.writestr(f"{k}.xml", "")
    assert "parts" in examine(path)


# ---- text tables ---------------------------------------------------------------------------


def test_cell_of_ten_megabytes(sound, tmp_path):
    folder = write_csv(sound, tmp_path)
    with (folder / "attestations.csv").open("a") as handle:
        handle.write("m1,t3," + "x" * 10 * MEBIBYTE + "\n")
    assert "attestations.csv, row 8: has a cell too long" in examine(folder)


def test_line_without_end(sound, tmp_path):
    folder = write_csv(sound, tmp_path)
    with (folder / "motifs.csv").open("a") as handle:
        handle.write("," * (limits.LINE_BYTES + 2 * MEBIBYTE))
    assert "line longer than" in examine(folder)


def test_billion_cells(sound, tmp_path):
    """A matrix of 100,000 x 10,000 cells is refused by its size before it is read."""
    folder = write_csv({"traditions": sound["traditions"]}, tmp_path)
    with (folder / "matrix.csv").open("w") as handle:
        handle.write("motif_id," + ",".join(f"t{k}" for k in range(10_000)) + "\n")
        handle.writelines("\n" for _ in range(100_000))
    said = examine(folder)
    assert "more than 200,000,000 cells" in said


def test_too_many_columns(sound, tmp_path):
    folder = write_csv(sound, tmp_path)
    (folder / "motifs.csv").write_text("motif_id" + ",x" * (limits.TABLE_COLUMNS + 1) + "\nm1\n")
    assert "columns, more than" in examine(folder)


def test_pipes_and_devices_are_not_opened(sound, tmp_path):
    folder = write_csv(sound, tmp_path)
    (folder / "motifs.csv").unlink()
    os.mkfifo(folder / "motifs.csv")
    assert "not an ordinary file" in examine(folder)
    (folder / "motifs.csv").unlink()
    (folder / "motifs.csv").symlink_to("/dev/zero")
    assert "not an ordinary file" in examine(folder)
    (folder / "motifs.csv").unlink()
    (folder / "motifs.csv").symlink_to(folder / "motifs.csv")
    examine(folder)


@pytest.mark.parametrize(
    "case",
    [
        ("TABLE_ROWS", 4, "csv", "more than 4 rows"),
        ("TABLE_BYTES", 100, "csv", "is larger than"),
        ("SURVEYED_BYTES", 4, "states", "sets of traditions searched"),
        ("MATRIX_CELLS", 10, "matrix", "more than 10 cells"),
        ("MATRIX_CELLS", 7, "matrix.xlsx", "more than 7 cells"),
        ("SURVEYED_BYTES", 4, "matrix", "as an attestations table"),
        ("WORKBOOK_BYTES", 100, "xlsx", "is larger than"),
        ("WORKBOOK_UNPACKED", 100, "xlsx", "would unpack to"),
        ("SHEET_ROWS", 3, "xlsx", "more rows or cells"),
        ("SHEET_CELLS", 30, "xlsx", "more rows or cells"),
        ("METADATA_BYTES", 100, "cldf", "larger than"),
        ("LAND_BYTES", 10, "csv", "larger than"),
    ],
)
def test_each_limit_is_kept(sound, tmp_path, monkeypatch, case):
    limit, value, form, words = case
    monkeypatch.setattr(limits, limit, value)
    if form == "states":
        sound["attestations"][0][2] = "state"
        for row, state in zip(sound["attestations"][1:], ["", "not searched"] * 3, strict=True):
            row[2] = state
    if form.startswith("matrix"):
        sound = {"traditions": sound["traditions"]}
        sound["matrix"] = [["motif_id", "t1", "t2", "t3"], ["m1", *"110"], ["m2", "1", "", "0"]]
    if form == "cldf":
        path = cldf(tmp_path)[0]
    else:
        path = (write_xlsx if form.endswith("xlsx") else write_csv)(sound, tmp_path)
    if path.is_dir():
        (path / "land.geojson").write_text('{"type": "FeatureCollection", "features": []}')
    assert words in examine(path)


# ---- CLDF metadata -------------------------------------------------------------------------

TERMS = "http://cldf.clld.org/v1.0/terms.rdf#"


def cldf(folder: Path) -> tuple[Path, dict]:
    """A tiny dataset and its metadata."""
    folder.mkdir(exist_ok=True)

    def table(url: str, kind: str, columns: dict[str, str]) -> dict:
        listed = [{"name": n, "propertyUrl": TERMS + p} for n, p in columns.items()]
        schema = {"columns": listed}
        return {"url": url, "dc:conformsTo": TERMS + kind, "tableSchema": schema}

    places = {"ID": "id", "Latitude": "latitude", "Longitude": "longitude"}
    values = {"ID": "id", "L": "languageReference", "P": "parameterReference", "V": "value"}
    metadata = {
        "dc:conformsTo": TERMS + "StructureDataset",
        "tables": [
            table("languages.csv", "LanguageTable", places),
            table("values.csv", "ValueTable", values),
        ],
    }
    (folder / "languages.csv").write_text("ID,Latitude,Longitude\na,1,2\nb,3,4\nc,5,6\n")
    (folder / "values.csv").write_text("ID,L,P,V\n1,a,p,x\n2,b,q,y\n")
    path = folder / "x-metadata.json"
    path.write_text(json.dumps(metadata))
    return path, metadata


def test_tiny_dataset_is_sound(tmp_path):
    assert examine(cldf(tmp_path)[0]) == ""


def test_names_no_file_can_have_are_missing_files(tmp_path):
    path, metadata = cldf(tmp_path)
    for url in ("x" * 300, "a" * 254 + ".c", "x/" * 400 + "y"):
        metadata["tables"][1]["url"] = url
        path.write_text(json.dumps(metadata))
        assert "is missing" in examine(path)


@pytest.mark.parametrize(
    "url",
    [
        "../outside.csv",
        "a/../../outside.csv",
        "..\\outside.csv",
        "/etc/passwd",
        "file:///etc/passwd",
        "http://localhost/values.csv",
        "https://localhost/values.csv",
        "C:\\values.csv",
        "~/values.csv",
        "link.csv",
        "linked/outside.csv",
        "",
        None,
        5,
        "x\x00y",
        "y" * 5_000,
        ".",
        "gone.csv",
        "\ud800.csv",
    ],
)
def test_tables_outside_the_dataset_are_refused(tmp_path, url):
    (tmp_path / "outside.csv").write_text("ID,L,P,V\n1,a,secret,x\n")
    path, metadata = cldf(tmp_path / "in")
    (tmp_path / "in" / "link.csv").symlink_to(tmp_path / "outside.csv")
    (tmp_path / "in" / "linked").symlink_to(tmp_path)
    metadata["tables"][1]["url"] = url
    path.write_text(json.dumps(metadata))
    said = examine(path)
    assert said
    assert "secret" not in said


@pytest.mark.parametrize(
    "text",
    [
        "",
        "{}",
        "[]",
        "null",
        '{"tables": {}}',
        '{"tables": [1, null, []]}',
        '{"tables": [{"dc:conformsTo": 3}]}',
        '{"a":' * 100_000,
        '{"tables": ' + "[" * 200_000,
        '{"x": ' + "9" * 10_000 + "}",
        "\ufeff{",
        '{"tables": [{"dc:conformsTo": "x#ValueTable", "url": "values.csv", "tableSchema": 7}]}',
    ],
)
def test_odd_metadata(tmp_path, text):
    path, _ = cldf(tmp_path)
    path.write_text(text, encoding="utf-8")
    assert examine(path)


@pytest.mark.parametrize(
    "dialect",
    [
        {"delimiter": ""},
        {"delimiter": ";;"},
        {"delimiter": "\n"},
        {"delimiter": '"'},
        {"delimiter": 7},
        {"quoteChar": "ab"},
        {"quoteChar": None},
        {"encoding": "rot13"},
        {"encoding": "utf-7"},
        {"encoding": ["utf-8"]},
        {"encoding": "utf-16"},
        {"skipRows": -1},
        {"skipRows": 10**9},
        {"skipRows": "2"},
        {"headerRowCount": 0},
        {"header": False},
        {"headerRowCount": 50},
        {"commentPrefix": 3},
        {"doubleQuote": False},
        "csv",
    ],
)
def test_odd_dialects(tmp_path, dialect):
    path, metadata = cldf(tmp_path)
    metadata["dialect"] = dialect
    path.write_text(json.dumps(metadata))
    examine(path)


def test_zipped_table_that_is_none(tmp_path):
    path, _ = cldf(tmp_path)
    (tmp_path / "values.csv").unlink()
    (tmp_path / "values.csv.zip").write_bytes(b"PK")
    assert "not a .zip" in examine(path)
    with zipfile.ZipFile(tmp_path / "values.csv.zip", "w") as archive:
        archive.writestr("../../values.csv", "ID,L,P,V\n1,a,p,x\n2,b,q,y\n")
    assert examine(path) == ""


# ---- fuzzing -------------------------------------------------------------------------------

TEXTS = st.one_of(
    st.text(max_size=12),
    st.sampled_from(
        [
            "t1",
            "m1",
            "*",
            "0",
            "1",
            "-",
            "NA",
            "?",
            "=1+1",
            "@x",
            "1e999",
            "12,5",
            "−3",
            "\x00",
            '"',
            '""',
            "'",
            ";",
            "\t",
            "\r",
            "\n",
            "\u202e",
            "\ufeff",
            "withheld",
            "restricted",
            "open",
            "90.0001",
            "-181",
            "nan",
            "inf",
            "999999999999999999999",
            "not searched",
            "x" * 300,
        ]
    ),
)
NAMES = st.sampled_from(["traditions", "motifs", "attestations", "surveyed", "contacts", "matrix"])
HEADERS = st.sampled_from(
    [
        "tradition_id",
        "motif_id",
        "id",
        "name",
        "latitude",
        "longitude",
        "family",
        "effort",
        "access",
        "acces",
        "label",
        "state",
        "source",
        "neighbour_id",
        "category",
        "",
        "rain",
    ]
)
EDIT = st.one_of(
    st.tuples(st.just("cell"), NAMES, st.integers(0, 8), st.integers(0, 8), TEXTS),
    st.tuples(st.just("head"), NAMES, st.just(0), st.integers(0, 8), HEADERS),
    st.tuples(st.just("row"), NAMES, st.integers(0, 8), st.just(0), st.lists(TEXTS, max_size=9)),
    st.tuples(st.just("drop"), NAMES, st.integers(0, 8), st.just(0), st.just("")),
    st.tuples(st.just("table"), NAMES, st.just(0), st.just(0),
              st.lists(st.lists(TEXTS, max_size=4), max_size=4)),
)  # fmt: skip
BYTES = st.lists(
    st.tuples(NAMES, st.floats(0, 1), st.integers(0, 3), st.binary(max_size=4)), max_size=3
)


def edited(edits) -> dict[str, list[list[str]]]:
    tables = {name: [list(row) for row in rows] for name, rows in SOUND.items()}
    for kind, name, row, column, value in edits:
        rows = tables.setdefault(name, [["motif_id", "tradition_id"]])
        if kind == "table":
            tables[name] = value
        elif kind == "row":
            rows.insert(min(row, len(rows)), value)
        elif rows and kind == "drop":
            del rows[row % len(rows)]
        elif rows and rows[row % len(rows)]:
            cells = rows[row % len(rows)]
            cells[column % len(cells)] = value
    return tables


def damaged(folder: Path, damage) -> None:
    for name, at, cut, put_in in damage:
        path = folder / f"{name}.csv"
        if path.exists():
            raw = path.read_bytes()
            place = int(at * len(raw))
            path.write_bytes(raw[:place] + put_in + raw[place + cut :])


RULES = st.builds(
    CatalogueRules,
    absent_rows=st.sampled_from(["searched", "not searched"]),
    restricted=st.booleans(),
    without=st.lists(TEXTS, max_size=2).map(tuple),
    effort=st.sampled_from(["", "", "rain", "zz"]),
)


def fuzz_tables(edits, damage, rules) -> None:
    folder = Path(tempfile.mkdtemp())
    try:
        try:
            write_csv(edited(edits), folder)
        except Exception:  # what csv cannot write is no input
            return
        damaged(folder, damage)
        examine(folder, rules, "tables as CSV, matrix beside")
    finally:
        shutil.rmtree(folder)


JSON = st.recursive(
    st.one_of(st.none(), st.booleans(), st.integers(-2, 2), TEXTS),
    lambda inner: st.one_of(st.lists(inner, max_size=3), st.dictionaries(TEXTS, inner, max_size=3)),
    max_leaves=6,
)
KEYS = st.sampled_from(
    [
        "url",
        "tableSchema",
        "columns",
        "name",
        "titles",
        "propertyUrl",
        "null",
        "separator",
        "dialect",
        "dc:conformsTo",
        "tables",
        "delimiter",
        "encoding",
        "header",
        "skipRows",
        "dc:title",
        "virtual",
    ]
)


def altered(value, steps, key, new):
    """Change one key somewhere inside nested JSON."""
    here = value
    for step in steps:
        if isinstance(here, dict) and here:
            inner = here[sorted(here)[step % len(here)]]
        elif isinstance(here, list) and here:
            inner = here[step % len(here)]
        else:
            break
        if not isinstance(inner, dict | list):
            break
        here = inner
    if isinstance(here, dict):
        here[key] = new
    elif isinstance(here, list):
        here.append(new)
    return value


def fuzz_metadata(changes, rules) -> None:
    folder = Path(tempfile.mkdtemp())
    try:
        path, metadata = cldf(folder)
        for steps, key, new in changes:
            altered(metadata, steps, key, new)
        path.write_text(json.dumps(metadata))
        examine(path, rules, "CLDF metadata")
    finally:
        shutil.rmtree(folder)


CHANGES = st.lists(
    st.tuples(st.lists(st.integers(0, 5), max_size=6), KEYS, JSON), min_size=1, max_size=4
)
PRESENCE = st.one_of(
    st.just("any"), st.dictionaries(TEXTS, st.lists(TEXTS, max_size=2).map(tuple), max_size=2)
)
CLDF_RULES = st.builds(CatalogueRules, presence=PRESENCE)


def _book_bytes() -> bytes:
    folder = Path(tempfile.mkdtemp())
    try:
        return write_xlsx(SOUND, folder).read_bytes()
    finally:
        shutil.rmtree(folder)


BOOK = _book_bytes()
SHEET = st.sampled_from(
    [
        "xl/worksheets/sheet1.xml",
        "xl/worksheets/sheet3.xml",
        "xl/workbook.xml",
        "[Content_Types].xml",
        "xl/sharedStrings.xml",
        "xl/_rels/workbook.xml.rels",
        "xl/styles.xml",
        "docProps/core.xml",
    ]
)


def fuzz_workbook(part, at, cut, put_in) -> None:
    folder = Path(tempfile.mkdtemp())
    try:
        path = folder / "x.xlsx"
        with zipfile.ZipFile(io.BytesIO(BOOK)) as old, zipfile.ZipFile(path, "w") as new:
            for item in old.infolist():
                data = old.read(item)
                if item.filename == part:
                    place = int(at * len(data))
                    data = data[:place] + put_in + data[place + cut :]
                new.writestr(item.filename, data)
        examine(path, None, "workbook parts")
    finally:
        shutil.rmtree(folder)


XML = st.one_of(
    st.binary(max_size=6),
    st.sampled_from([b"<", b">", b"&#0;", b"&a;", b"<c/>", b'<row r="x">', b"]]>", b"<!--", b'"']),
)
QUIET = [HealthCheck.too_slow, HealthCheck.filter_too_much]
# By hand: new inputs every time.
MANY = settings(derandomize=False, database=None, deadline=None, suppress_health_check=QUIET)


@given(edits=st.lists(EDIT, min_size=1, max_size=6), damage=BYTES, rules=RULES)
@settings(max_examples=150, deadline=None, suppress_health_check=QUIET)
def test_any_tables(edits, damage, rules):
    fuzz_tables(edits, damage, rules)


@given(changes=CHANGES, rules=CLDF_RULES)
@settings(max_examples=150, deadline=None, suppress_health_check=QUIET)
def test_any_metadata(changes, rules):
    fuzz_metadata(changes, rules)


@given(part=SHEET, at=st.floats(0, 1), cut=st.integers(0, 40), put_in=XML)
@settings(max_examples=60, deadline=None, suppress_health_check=QUIET)
def test_any_workbook(part, at, cut, put_in):
    fuzz_workbook(part, at, cut, put_in)


@pytest.mark.calibration
@given(edits=st.lists(EDIT, min_size=1, max_size=6), damage=BYTES, rules=RULES)
@settings(MANY, max_examples=60_000)
def test_very_many_tables(edits, damage, rules):
    fuzz_tables(edits, damage, rules)


@pytest.mark.calibration
@given(changes=CHANGES, rules=CLDF_RULES)
@settings(MANY, max_examples=40_000)
def test_very_much_metadata(changes, rules):
    fuzz_metadata(changes, rules)


@pytest.mark.calibration
@given(part=SHEET, at=st.floats(0, 1), cut=st.integers(0, 40), put_in=XML)
@settings(MANY, max_examples=10_000)
def test_very_many_workbooks(part, at, cut, put_in):
    fuzz_workbook(part, at, cut, put_in)
