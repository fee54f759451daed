"""LaTeX tables: every sign set as it stands, no line wider than the page."""

from __future__ import annotations

import os
import re
import shutil
import subprocess

import pytest

import deposits
from twicetold.evidence.columns import Column
from twicetold.report.supplement.latex import document, escaped, fragment
from twicetold.report.supplement.table import Table

pytestmark = pytest.mark.browser  # as with a browser: may not be skipped in CI


def compiled(folder, engine="pdflatex"):
    if shutil.which(engine) is None:
        pytest.skip(f"{engine} is not on this machine")
    subprocess.run(
        [
            engine,
            "-interaction=nonstopmode",
            "-halt-on-error",
            "-no-shell-escape",
            "supplement.tex",
        ],
        cwd=folder,
        capture_output=True,
        check=True,
        timeout=120,
        env={**os.environ, "max_print_line": "1000"},
    )
    return (folder / "supplement.log").read_text(encoding="latin-1")


def wide_lines(log):
    """Overfull boxes by how many points they stick out."""
    return [float(x) for x in re.findall(r"Overfull \\hbox \(([\d.]+)pt too wide\)", log)]


def write(folder, table):
    folder.mkdir()
    (folder / f"{table.name}.tex").write_text(fragment(table), encoding="utf-8")
    text = document([table], title=deposits.SPECIAL, notice="100 % & more")
    (folder / "supplement.tex").write_text(text, encoding="utf-8")
    return folder


def text_table(names):
    columns = (
        Column("motif_id", "string", ""),
        Column("name", "string", ""),
        Column("p_against_emergence", "number", ""),
    )
    rows = tuple((f"id_{k}", n, "0.000123456") for k, n in enumerate(names))
    return Table("S1_motifs", deposits.SPECIAL, columns, rows, key=("motif_id",))


def test_the_deposit_compiles_and_fits_the_page(tmp_path):
    shutil.copytree(deposits.deposit() / "latex", tmp_path / "latex")
    log = compiled(tmp_path / "latex")
    assert wide_lines(log) == []
    assert "Missing character" not in log
    assert re.search(r"Output written on supplement\.pdf \((\d+) pages", log)


def test_every_latin_letter_and_every_sign_of_the_basic_planes_compiles(tmp_path):
    signs = [chr(c) for c in (*range(32, 0x250), *range(0x2000, 0x2070), *range(0x20A0, 0x20C0))]
    signs += [chr(c) for c in (*range(0x1E00, 0x1F00), 0x2212, 0x4E00, 0x1F600, 0xFFFD, 0x200B)]
    names = ["".join(signs[k : k + 24]) for k in range(0, len(signs), 24)]
    log = compiled(write(tmp_path / "all", text_table(names)))
    assert "Missing character" not in log
    assert wide_lines(log) == []


def test_long_words_and_rows_that_begin_like_options_compile(tmp_path):
    names = [
        "W" * 200,
        "[3pt] x",
        "* x",
        "_" * 90,
        "x" * 5000,
        "\\end{longtable}",
        "\\input{/etc/passwd}",
    ]
    log = compiled(write(tmp_path / "odd", text_table(names)))
    assert wide_lines(log) == []


def test_luatex_takes_the_same_files(tmp_path):
    if shutil.which("lualatex") is None:
        return  # not among what CI installs
    shutil.copytree(deposits.deposit() / "latex", tmp_path / "latex")
    assert "Output written" in compiled(tmp_path / "latex", "lualatex")


@pytest.mark.parametrize(
    ("text", "wanted"),
    [
        ("50 % of A&B", r"50 \% of A\&B"),
        ("--", "-{}-{}"),
        ("é", r"\'{e}"),
        ("e\u0301", r"\'{e}"),
        ("ǎ", r"\v{a}"),
        ("ṣ", r"\d{s}"),
        ("í", r"\'{\i}"),
        ("Øß", r"\O{}\ss{}"),
        ("月", r"\otherscript{月}{{[}U+6708{]}}"),
        ("\\", r"\textbackslash{}"),
    ],
)
def test_escaping(text, wanted):
    assert escaped(text) == wanted


def test_numbers_are_short_and_blank_columns_left_out():
    columns = tuple(Column(n, "number", "") for n in ("a", "b", "c", "d"))
    out = fragment(Table("S4_x", "x", columns, (("0.123456", "-2", "1e-06", ""),)))
    assert r"0.1235 & $-2$ & $1\times10^{-6}$\\" in out


def test_a_table_without_rows_compiles(tmp_path):
    table = Table("S4_x", "x", (Column("a", "string", ""),), ())
    assert "Output written" in compiled(write(tmp_path / "none", table))
