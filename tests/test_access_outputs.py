"""Withheld rows leave no byte anywhere; restricted ones show only in totals; withdrawal."""

from __future__ import annotations

import csv
import io
import json
import logging
import shutil
import zipfile

import pytest

import deposits
from twicetold import run as commands
from twicetold.catalogue import read_catalogue
from twicetold.errors import TwicetoldError
from twicetold.report.supplement.dictionary import describe
from twicetold.report.supplement.table import read_rows
from twicetold.run import check_tables, motif_run, rank_run, supplement_run
from twicetold.verify import verify_deposit

SPREAD = ("emergence", "ancestry", "contact")


def all_bytes(folder):
    """Every file with its name in front; the contents of packed ones too."""
    for path in sorted(p for p in folder.rglob("*") if p.is_file()):
        yield path, str(path.relative_to(folder)).encode() + b"\n" + path.read_bytes()
        if zipfile.is_zipfile(path):
            with zipfile.ZipFile(path) as packed:
                for name in packed.namelist():
                    yield path, name.encode() + packed.read(name)


def traces(folder, word):
    return sorted({p.name for p, raw in all_bytes(folder) if word.lower().encode() in raw.lower()})


def test_the_search_would_find_something():
    assert traces(deposits.tables(), deposits.WITHHELD)
    assert traces(deposits.deposit(), "Nowhere") == []  # a name of no use is not published
    assert "supplement.xlsx" in traces(deposits.deposit(), "quoted by its own")


@pytest.fixture(scope="module")
def with_spread(tmp_path_factory):
    """A run with the spread worlds and its cache of snapshots; what it said and logged."""
    folder = tmp_path_factory.mktemp("spread")
    said = []
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("TWICETOLD_CACHE", str(folder / "cache"))
        plan = deposits.plan(evidence__worlds=SPREAD, evidence__walks=100)
        said.append(rank_run(deposits.tables(), folder / "run", plan, pool=deposits.pool()))
    return folder, said


def test_no_byte_of_a_withheld_row_in_run_deposit_log_or_cache(
    with_spread, tmp_path, caplog, capfd
):
    folder, said = with_spread
    caplog.set_level(logging.DEBUG)
    plan = deposits.plan()
    said += check_tables(deposits.tables(), plan)[1]
    said.append(motif_run(deposits.tables(), "M01", plan, pool=deposits.pool(), as_json=True))
    page = tmp_path / "page"
    said.append(motif_run(deposits.tables(), "M03", plan, pool=deposits.pool(), page=page))
    said += verify_deposit(deposits.deposit(), pool=deposits.pool())[1]
    assert list((folder / "cache").rglob("*")), "nothing was kept, so nothing was searched"
    shown = capfd.readouterr()
    text = "\n".join([*said, caplog.text, shown.out, shown.err])
    # Restricted rows were not let in by this plan: nothing of them either.
    for word in (deposits.WITHHELD, deposits.RESTRICTED):
        for place in (folder, deposits.finished_run(), deposits.deposit(), page):
            assert traces(place, word) == []
        assert word.lower() not in text.lower()


def test_a_withheld_motif_is_as_unknown_as_one_that_is_not_there():
    with pytest.raises(TwicetoldError) as told:
        motif_run(deposits.tables(), deposits.WITHHELD[:4], deposits.plan(), pool=deposits.pool())
    assert deposits.WITHHELD not in str(told.value)


def test_what_a_withheld_row_says_changes_no_byte(tmp_path):
    """Not even a digest may depend on it."""
    tables = shutil.copytree(deposits.tables(), tmp_path / "tables")
    for path in tables.glob("*.csv"):
        text = path.read_text(encoding="utf-8")
        lines = [
            line.replace(deposits.WITHHELD, "Other").replace("-50", "-51")
            if deposits.WITHHELD in line
            else line
            for line in text.split("\n")
        ]
        path.write_text("\n".join(lines), encoding="utf-8")
    run, out = tmp_path / "run", tmp_path / "deposit"
    rank_run(tables, run, deposits.plan(), pool=deposits.pool())
    supplement_run(run, out, cldf=True, force=False, pool=deposits.pool())
    for mine, theirs in ((run, deposits.finished_run()), (out, deposits.deposit())):
        first = {p.relative_to(mine): raw for p, raw in all_bytes(mine)}
        second = {p.relative_to(theirs): raw for p, raw in all_bytes(theirs)}
        assert first.keys() == second.keys()
        different = [str(k) for k in first if first[k] != second[k]]
        assert [k for k in different if not k.endswith("timings.json")] == []


@pytest.fixture(scope="module")
def restricted_deposit(tmp_path_factory):
    out = tmp_path_factory.mktemp("restricted") / "deposit"
    supplement_run(deposits.restricted_run(), out, cldf=False, force=False, pool=deposits.pool())
    return out


def test_restricted_rows_take_part_when_the_plan_lets_them(restricted_deposit):
    open_rows = {r[1]: r for r in read_rows(deposits.finished_run() / "motifs.csv")[1]}
    header, rows = read_rows(restricted_deposit / "S1_motifs.csv", guard=True)
    at = header.index("holders")
    both = {r[header.index("motif_id")]: r for r in rows}
    assert int(both["M01"][at]) == int(open_rows["M01"][at]) + 6


def test_no_restricted_row_is_named_in_the_deposit_or_on_the_pages(restricted_deposit):
    assert traces(restricted_deposit, deposits.RESTRICTED) == []
    assert traces(restricted_deposit, deposits.WITHHELD) == []
    for folder in ("motifs", "assets", "figures"):
        assert traces(deposits.restricted_run() / folder, deposits.RESTRICTED) == []
    page = (deposits.restricted_run() / "index.html").read_text(encoding="utf-8")
    assert deposits.RESTRICTED not in page


def test_no_difference_or_small_total_points_at_a_restricted_row(restricted_deposit):
    header, rows = read_rows(restricted_deposit / "S1_motifs.csv", guard=True)
    blank = 0
    for row in rows:
        cells = dict(zip(header, row, strict=True))
        if cells["holders"]:
            assert int(cells["holders"]) >= 5
        else:
            assert not any(v for k, v in cells.items() if k.startswith(("p_", "q_", "joins")))
            assert "fewer than 5 holders" in cells["reason"]
            blank += 1
    # M00 has two open holders and a restricted one: a total of three tells too much.
    assert blank > 3
    assert not next(r for r in rows if r[1] == "M00")[header.index("holders")]
    assert [r[0] for r in rows] == [str(k + 1) for k in range(len(rows))]
    # No attestations from which to subtract.
    assert not (restricted_deposit / "catalogue").exists()
    assert not (restricted_deposit / "S3_bridges.csv").exists()
    small = {r[1] for r in rows if not r[header.index("holders")]}
    for path in restricted_deposit.glob("S4_*.csv"):
        head, body = read_rows(path, guard=True)
        if "motif_id" in head:
            assert small.isdisjoint(r[head.index("motif_id")] for r in body)
    text = (restricted_deposit / "S5_provenance.csv").read_text(encoding="utf-8")
    assert "restricted traditions,6" in text
    assert "restricted motifs,fewer than 5" in text


def test_a_restricted_deposit_says_that_it_cannot_be_verified_and_its_run_can(restricted_deposit):
    agrees, lines = verify_deposit(restricted_deposit, pool=deposits.pool())
    assert not agrees
    assert "restricted records took part" in lines[-1]
    assert lines[0].startswith("All ")
    agrees, lines = verify_deposit(deposits.restricted_run(), pool=deposits.pool())
    assert agrees, lines


def test_no_cldf_dataset_of_restricted_records(tmp_path):
    with pytest.raises(TwicetoldError, match="--cldf"):
        supplement_run(
            deposits.restricted_run(), tmp_path / "d", cldf=True, force=False, pool=deposits.pool()
        )
    assert list(tmp_path.iterdir()) == []


def test_labels_are_carried_through_word_for_word():
    for name in ("README.md", "S2_traditions.csv", "traditions.geojson", "cldf/languages.csv"):
        text = (deposits.deposit() / name).read_text(encoding="utf-8")
        assert text.count(deposits.LABEL) == 2, name


def test_withdrawing_is_ranking_without_and_says_what_moved(tmp_path):
    run, plan = tmp_path / "run", deposits.plan(sensitivity__hidden=False)
    rank_run(deposits.tables(), run, plan, pool=deposits.pool(), without=("T01", "T16"))
    gone = shutil.copytree(deposits.tables(), tmp_path / "tables")
    for path in gone.glob("*.csv"):
        lines = path.read_text(encoding="utf-8").splitlines(keepends=True)
        kept = [x for x in lines if not x.startswith(("T01,", "T16,"))]
        kept = [x for x in kept if ",T01," not in x and ",T16," not in x]
        kept = [x for x in kept if not x.endswith((",T01\n", ",T16\n"))]
        path.write_text("".join(kept), encoding="utf-8")
    rank_run(gone, tmp_path / "other", plan, pool=deposits.pool())
    assert (run / "motifs.csv").read_bytes() == (tmp_path / "other" / "motifs.csv").read_bytes()
    moved = read_rows(run / "tables" / "moved.csv")
    before = rank_frame(plan)
    after = {
        r[1]: dict(zip(read_rows(run / "motifs.csv")[0], r, strict=True))
        for r in read_rows(run / "motifs.csv")[1]
    }
    said = {row[0]: dict(zip(moved[0], row, strict=True)) for row in moved[1]}
    shown = ("holders", "joins", "p_against_emergence", "verdict")
    differ = {m for m in after if any(after[m][c] != before[m][c] for c in shown)}
    assert differ == set(said)
    assert len(differ) > 0
    for motif, row in said.items():
        for column in shown:
            assert (row[column], row[f"{column}_with"]) == (
                after[motif][column],
                before[motif][column],
            )


def rank_frame(plan):
    from twicetold.evidence import rank_catalogue

    catalogue = read_catalogue(deposits.tables())
    text = commands.csv_text(rank_catalogue(catalogue, plan, pool=deposits.pool()).motifs)
    return {row["motif_id"]: row for row in csv.DictReader(io.StringIO(text))}


def test_the_record_of_a_run_holds_counts_of_withheld_rows_and_nothing_else():
    record = json.loads((deposits.finished_run() / "run.json").read_text(encoding="utf-8"))
    assert record["catalogue"]["withheld_traditions"] == 6
    assert record["catalogue"]["withheld_motifs"] == 1


def test_every_column_of_a_run_with_the_spread_worlds_is_described(with_spread):
    for path in (with_spread[0] / "run" / "tables").glob("*.csv"):
        header, rows = read_rows(path)
        for k, column in enumerate(header):
            said = describe(f"S4_{path.stem}", column, [r[k] for r in rows]).meaning
            assert said != column.replace("_", " ").capitalize() + ".", (path.stem, column)
