"""The commands: what they print, refuse, write and leave alone."""

from __future__ import annotations

import csv
import json
import os
import re
import signal
import subprocess
import sys
import time
from dataclasses import dataclass
from pathlib import Path

import pytest

from small_world import put, small_world
from twicetold import cli
from twicetold.errors import TwicetoldError
from twicetold.plan import Plan, read_plan
from twicetold.run import rank_run, resolved_plan
from twicetold.workers import ThreadPool

QUICK = ("--worlds", "emergence,ancestry", "--draws", "499")


@dataclass
class Said:
    code: int
    out: str
    err: str


@pytest.fixture
def run(monkeypatch, capsys):
    """Run a command in this process, as the console script does."""

    def command(*words) -> Said:
        monkeypatch.setattr(sys, "argv", ["twicetold", *map(str, words)])
        capsys.readouterr()
        try:
            cli.main()
            code = 0
        except SystemExit as end:
            code = end.code or 0
        said = capsys.readouterr()
        return Said(code, said.out, said.err)

    return command


def twicetold(*words, **more) -> subprocess.CompletedProcess[str]:
    """Run a command in a process of its own."""
    command = [sys.executable, "-m", "twicetold.cli", *map(str, words)]
    return subprocess.run(command, capture_output=True, text=True, check=False, **more)


@pytest.fixture
def world():
    return small_world()


@pytest.fixture
def catalogue(world, tmp_path) -> Path:
    return put(world, tmp_path / "catalogue")


def everything(folder: Path) -> dict[str, bytes]:
    """Every file below a folder, hidden ones too."""
    return {
        p.relative_to(folder).as_posix(): p.read_bytes() if p.is_file() else b"/"
        for p in folder.rglob("*")
    }


def assert_refused(said: Said, *words: str) -> None:
    assert said.code == 2, said
    assert said.out == ""
    assert "Traceback" not in said.err
    assert "fault of the program" not in said.err
    for word in words:
        assert word in said.err


def cell(table, row, column, text):
    """Change one cell; row as a spreadsheet counts, column by its name."""

    def change(tables):
        tables[table][row - 1][tables[table][0].index(column)] = text

    return change


def extra(table, *cells):
    return lambda tables: tables[table].append(list(cells))


def cut(table, rows):
    return lambda tables: tables.update({table: tables[table][:rows]})


def many(table, column, text):
    def change(tables):
        at = tables[table][0].index(column)
        for row in tables[table][1:]:
            row[at] = text

    return change


def both(*changes):
    return lambda tables: [change(tables) for change in changes]


# What is changed in the tables, and words that must be said: file, row, column, fault, remedy.
MALFORMED = {
    "swapped": (
        both(cell("traditions", 2, "latitude", "120"), cell("traditions", 2, "longitude", "45")),
        ["traditions.csv, row 2, column latitude:", "swapped"],
    ),
    "no number": (
        cell("traditions", 3, "longitude", "west"),
        ["traditions.csv, row 3, column longitude:", "not a number"],
    ),
    "half a place": (
        cell("traditions", 3, "longitude", ""),
        ["traditions.csv, row 3, column longitude:"],
    ),
    "no effort": (
        cell("traditions", 4, "effort", "0"),
        ["traditions.csv, row 4, column effort:", "greater than 0"],
    ),
    "unknown tradition": (
        extra("attestations", "m1", "t99", ""),
        ["attestations.csv, row 39, column tradition_id:", "'t99'"],
    ),
    "unknown motif": (
        extra("attestations", "M1", "t9", ""),
        ["attestations.csv, row 39, column motif_id:", "Did you mean 'm1'"],
    ),
    "id twice": (
        extra("traditions", "t3", "again", "1", "1", "", "1", ""),
        ["traditions.csv, row 22, column tradition_id:", "row 5"],
    ),
    "motif twice": (
        extra("motifs", "m2", "again", "", ""),
        ["motifs.csv, row 9, column motif_id:", "row 3"],
    ),
    "ragged": (extra("attestations", "m1"), ["attestations.csv, row 39:", "header has 3"]),
    "formula": (
        cell("traditions", 2, "longitude", "=A1+1"),
        ["traditions.csv, row 2, column longitude:", "formula"],
    ),
    "no such column": (
        cell("traditions", 1, "latitude", "latitud"),
        ["traditions.csv, row 1, column latitude:", "'latitud'"],
    ),
    "unknown access": (
        cell("motifs", 2, "access", "secret"),
        ["motifs.csv, row 2, column access:"],
    ),
    "empty file": (cut("traditions", 0), ["traditions.csv"]),
    "header only": (cut("attestations", 1), ["attestations.csv"]),
    "no table": (lambda tables: tables.pop("attestations"), ["attestations"]),
    "single tradition": (cut("traditions", 2), ["traditions.csv", "Only one tradition"]),
    "nobody located": (
        both(many("traditions", "latitude", ""), many("traditions", "longitude", "")),
        ["traditions.csv", "No tradition has"],
    ),
    "one point": (
        both(many("traditions", "latitude", "5"), many("traditions", "longitude", "6")),
        ["traditions.csv", "one point"],
    ),
}


class TestMalformedTables:
    @pytest.mark.parametrize("fault", MALFORMED)
    def test_said_by_every_command_and_nothing_written(self, fault, run, world, tmp_path):
        change, words = MALFORMED[fault]
        change(world)
        folder = put(world, tmp_path / "catalogue")
        before = everything(tmp_path)
        out = tmp_path / "out"
        assert_refused(run("check", folder), *words)
        for command in (
            ("plan", folder, "--out", out),
            ("test", folder, "m1", "--page", out, *QUICK),
            ("rank", folder, "--out", out, *QUICK),
            ("rank", folder, "--out", out, "--quiet", *QUICK),
        ):
            said = run(*command)
            assert_refused(said, *words)
            assert str(tmp_path) not in said.err
        assert everything(tmp_path) == before

    @pytest.mark.parametrize(
        ("raw", "words"),
        [
            (b"\xff\xfe\x00", ["motifs.csv", "UTF-8"]),
            ("motif_id,name\nm1,Orú\n".encode("latin-1"), ["motifs.csv, row 2", "0xFA"]),
            (b'motif_id,name\nm1,"open\n', ["motifs.csv, row 2", "quotation mark"]),
            (b"", ["motifs.csv"]),
            (b"motif_id,name\nm1,a\x00b\n", ["motifs.csv, row 2", "NUL"]),
        ],
    )
    def test_bytes_that_are_no_table(self, raw, words, run, catalogue, tmp_path):
        (catalogue / "motifs.csv").write_bytes(raw)
        before = everything(tmp_path)
        assert_refused(run("check", catalogue), *words)
        assert_refused(run("rank", catalogue, "--out", tmp_path / "out", *QUICK), *words)
        assert everything(tmp_path) == before

    def test_problems_come_together(self, run, world, tmp_path):
        for change in ("no number", "no effort", "unknown motif", "motif twice"):
            MALFORMED[change][0](world)
        said = run("check", put(world, tmp_path / "catalogue"))
        assert_refused(said, "4 problems in catalogue:")
        assert len(said.err.strip().splitlines()) == 5

    @pytest.mark.parametrize("name", ["nowhere", "catalogue/motifs.csv", "empty", "old.xls"])
    def test_what_is_no_catalogue(self, name, run, catalogue, tmp_path):
        (tmp_path / "empty").mkdir()
        (tmp_path / "old.xls").write_bytes(b"\xd0\xcf\x11\xe0")
        assert_refused(run("check", tmp_path / name))
        assert_refused(run("rank", tmp_path / name, "--out", tmp_path / "out", *QUICK))
        assert not (tmp_path / "out").exists()


class TestOddButSound:
    """Nothing is wrong with the tables: the run goes on and says what it cannot tell."""

    def table(self, run, world, tmp_path):
        folder = put(world, tmp_path / "catalogue")
        said = run("check", folder)
        assert said.code == 0
        assert said.out.splitlines()[-1] == "ready"
        done = run("rank", folder, "--out", tmp_path / "out", *QUICK)
        assert done.code == 0, done.err
        with (tmp_path / "out" / "motifs.csv").open(newline="") as file:
            return said, {row["motif_id"]: row for row in csv.DictReader(file)}

    def test_motif_nobody_holds(self, run, world, tmp_path):
        extra("motifs", "m8", "the unheard", "sea", "")(world)
        said, rows = self.table(run, world, tmp_path)
        assert "'m8' is attested in no" in said.out
        assert len(rows) == 8
        assert rows["m8"]["holders"] == "0"
        assert rows["m8"]["verdict"] == "undecided"
        assert rows["m8"]["reason"]
        assert int(rows["m8"]["rank"]) == 8

    def test_motif_everybody_holds(self, run, world, tmp_path):
        world["attestations"] += [
            ["m5", f"t{k}", ""]
            for k in range(20)
            if ["m5", f"t{k}", "notebook"] not in world["attestations"]
        ]
        said, rows = self.table(run, world, tmp_path)
        assert "'m5' is attested in all 20" in said.out
        assert rows["m5"]["verdict"] == "undecided"
        assert rows["m5"]["reason"]
        assert rows["m5"]["p_against_emergence"] in ("", "1")

    def test_two_traditions(self, run, world, tmp_path):
        cut("traditions", 3)(world)
        world["attestations"] = [*world["attestations"][:1], ["m1", "t0", ""], ["m2", "t1", ""]]
        _, rows = self.table(run, world, tmp_path)
        assert {row["verdict"] for row in rows.values()} == {"undecided"}

    def test_restricted_enters_only_when_asked(self, run, world, tmp_path):
        cell("traditions", 2, "access", "restricted")(world)
        cell("traditions", 3, "access", "withheld")(world)
        cell("motifs", 8, "access", "withheld")(world)
        folder = put(world, tmp_path / "catalogue")
        assert run("rank", folder, "--out", tmp_path / "out", *QUICK).code == 0
        written = everything(tmp_path / "out")
        record = json.loads(written["run.json"])
        assert record["catalogue"]["traditions"] == 18
        assert record["catalogue"]["motifs"] == 6
        asked = tmp_path / "plan.toml"
        asked.write_text("[catalogue]\nrestricted = true\n")
        again = run("rank", folder, "--out", tmp_path / "two", "--plan", asked, *QUICK)
        assert again.code == 0, again.err
        two = everything(tmp_path / "two")
        assert json.loads(two["run.json"])["catalogue"]["traditions"] == 19
        for name, content in (written | {f"two/{k}": v for k, v in two.items()}).items():
            for secret in (b"Place 1,", b"Place 1<", b'"Place 1"', b"the echo"):
                assert secret not in content, name
            if name.startswith(("two/catalogue/", "two/contacts.csv")):
                continue  # what the run was made of, for later commands; no output to pass on
            for secret in (b"Place 0,", b"Place 0<", b'"Place 0"'):
                assert secret not in content, name


class TestWrongWords:
    def test_motif_unknown(self, run, catalogue):
        assert_refused(run("test", catalogue, "m99", *QUICK), "'m99'")

    def test_motif_near(self, run, catalogue):
        assert_refused(run("test", catalogue, "the stone boot", *QUICK), "the stone boat")

    def test_motif_name_of_two(self, run, world, tmp_path):
        cell("motifs", 3, "name", "the stone boat")(world)
        folder = put(world, tmp_path / "catalogue")
        assert_refused(run("test", folder, "the stone boat", *QUICK), "m1", "m2")
        assert run("test", folder, "m2", *QUICK).code == 0

    @pytest.mark.parametrize(
        ("words", "said"),
        [
            (("--worlds", "emergance"), ["evidence.worlds", "emergence, ancestry"]),
            (("--worlds", ""), ["evidence.worlds", "at least one"]),
            (("--graph", "nearest"), ["graph.rule", "nearest:K"]),
            (("--graph", "nearest:0"), ["nearest:0", "1 to 40"]),
            (("--graph", "nearest:41"), ["nearest:41", "1 to 40"]),
            (("--graph", "within:0"), ["within:0"]),
            (("--graph", "given"), ["contacts"]),
            (("--graph", "given:nowhere.gal"), ["nowhere.gal"]),
            (("--propensity", "luck"), ["emergence.propensity", "equal, effort"]),
            (("--propensity", "covariates"), ["emergence.covariates"]),
            (("--draws", "3"), ["evidence.draws", "99"]),
            (("--draws", "many"), ["--draws"]),
            (("--seed", "-1"), ["evidence.seed"]),
            (("--workers", "0"), ["--workers", "0"]),
            (("--by", "luck"), ["--by", "moran_i"]),
            (("--without", "t99"), ["--without", "t99"]),
            (("--nonsense",), ["--nonsense"]),
        ],
    )
    def test_option(self, words, said, run, catalogue, tmp_path):
        before = everything(tmp_path)
        assert_refused(run("rank", catalogue, "--out", tmp_path / "out", *words), *said)
        assert everything(tmp_path) == before

    @pytest.mark.parametrize(
        ("words", "said"),
        [
            (("--graph", "nearest:0"), ["graph.rule", "nearest:0", "1 to 40"]),
            (("--graph", "nearest:41"), ["nearest:41", "1 to 40"]),
            (("--graph", "nearest:٣"), ["nearest:٣", "1 to 40"]),
            (("--graph", "within:0"), ["within:0", "above 0"]),
            (("--graph", "within:-5"), ["graph.rule", "within:-5"]),
            (("--graph", "within:" + "9" * 400), ["within:KM"]),
            (("--graph", "given"), ["contacts"]),
            (("--graph", "given:nowhere.gal"), ["nowhere.gal", "cannot be read"]),
            (("--graph", "given: "), ["given:FILE"]),
            (("--propensity", "luck"), ["emergence.propensity"]),
            (("--propensity", "covariates"), ["emergence.covariates"]),
            (("--draws", "0"), ["evidence.draws", "99"]),
            (("--draws", "-5"), ["evidence.draws", "99"]),
            (("--walks", "-1"), ["evidence.walks", "100"]),
            (("--seed", "-1"), ["evidence.seed"]),
            (("--worlds", ","), ["evidence.worlds", "at least one"]),
        ],
    )
    def test_plan_refuses_what_a_run_would(self, words, said, run, catalogue, tmp_path):
        before = everything(tmp_path)
        refused = run("plan", catalogue, "--out", tmp_path / "plan.toml", *words)
        assert_refused(refused, *said)
        again = run("rank", catalogue, "--out", tmp_path / "out", *words)
        assert refused.err == again.err
        if words[0] != "--worlds":
            assert_refused(run("power", catalogue, *words), *said)
        assert everything(tmp_path) == before

    def test_a_column_that_cannot_carry_the_fit_is_said_before_the_plan_is_written(
        self, world, tmp_path
    ):
        world["traditions"][0].append("rain")
        for row in world["traditions"][1:]:
            row.append("3")
        folder = put(world, tmp_path / "catalogue")
        wanted = Plan().replace(emergence__propensity="covariates", emergence__covariates=("rain",))
        with pytest.raises(TwicetoldError, match="'rain' must vary"):
            resolved_plan(folder, wanted)
        # A run says the same.
        with pytest.raises(TwicetoldError, match="'rain' must vary"):
            rank_run(folder, tmp_path / "out", wanted, pool=ThreadPool(1))

    def test_a_rounding_onto_one_point_is_said_before_the_work(
        self, run, world, tmp_path, monkeypatch
    ):
        for k, row in enumerate(world["traditions"][1:]):
            row[2:4] = [f"{1 + 0.01 * (k % 4):g}", f"{1 + 0.01 * (k // 4):g}"]
        folder = put(world, tmp_path / "catalogue")
        before = everything(tmp_path)
        assert_refused(run("plan", folder, "--out", tmp_path / "p.toml"), "report.round_degrees")
        with monkeypatch.context() as patch:
            patch.setattr("twicetold.evidence.rank_catalogue", None)  # never reached
            said = run("rank", folder, "--out", tmp_path / "out", *QUICK)
        assert_refused(said, "report.round_degrees", "[report]")
        assert everything(tmp_path) == before
        finer = tmp_path / "finer.toml"
        finer.write_text("[report]\nround_degrees = 0.01\n")
        done = run("rank", folder, "--out", tmp_path / "out", "--plan", finer, *QUICK)
        assert done.code == 0, done.err

    def test_efforts_whose_powers_no_number_holds(self, run, world, tmp_path):
        for k, row in enumerate(world["traditions"][1:]):
            row[5] = f"1e{(-1) ** k * 90}"
        folder = put(world, tmp_path / "catalogue")
        steep = tmp_path / "plan.toml"
        steep.write_text("[emergence]\nexponent = 10\n")
        said = run("test", folder, "m1", "--plan", steep, *QUICK)
        assert_refused(said, "emergence.exponent", "smaller")

    def test_withdrawing_nearly_everybody(self, run, catalogue, tmp_path):
        gone = [word for k in range(19) for word in ("--without", f"t{k}")]
        assert_refused(
            run("rank", catalogue, "--out", tmp_path / "out", *gone, *QUICK), "two traditions"
        )

    @pytest.mark.parametrize(
        ("text", "said"),
        [
            ("[evidence]\ndrwas = 3", ["plan.toml", "'drwas'", "Did you mean 'draws'"]),
            ("[evidnce]\ndraws = 3", ["plan.toml", "Did you mean 'evidence'"]),
            ("[catalogue]\neffort = 'texts'", ["traditions.csv", "texts"]),
            ("[catalogue]\nfamily = 'stock'", ["traditions.csv", "stock"]),
            ("[catalogue]\nwithout = ['t99']", ["t99"]),
            ("[ancestry]\nlevel = 'branch'", ["ancestry.level", "branch"]),
            ("[ancestry]\nlevel = 'clan'", ["ancestry.level", "family, branch"]),
            ("[graph]\nrule = 'nearest:0'", ["graph.rule", "nearest:0"]),
            ("[graph]\nrule = 'within:-5'", ["graph.rule", "within:-5"]),
            ("[sensitivity]\ngraphs = ['nearest:0']", ["sensitivity.graphs", "nearest:0"]),
            ("[sensitivity]\ngraphs = ['within:0']", ["sensitivity.graphs", "within:0"]),
            ("[sensitivity]\nreaches = [0.5]", ["sensitivity.reaches", "0.5"]),
            ("[sensitivity]\nexponents = [-1]", ["sensitivity.exponents", "-1"]),
            ("[sensitivity]\ndraws = -1", ["sensitivity.draws", "-1"]),
            ("[sensitivity]\nregions = 1", ["sensitivity.regions", "1"]),
            ("[sensitivity]\nhidden_km = 1e-300", ["sensitivity.hidden_km", "1e-300"]),
            ("[evidence]\nalpha = 0", ["evidence.alpha", "got 0"]),
            ("[evidence]\nalpha = 1", ["evidence.alpha", "got 1"]),
            ("[evidence]\nwalks = -3", ["evidence.walks", "-3"]),
            ("[spread]\nreach = 0.5", ["spread.reach", "0.5"]),
            ("[spread]\nturnover = 1.2", ["spread.turnover", "1.2"]),
            ("[spread]\nturnover = 0", ["spread.turnover", "got 0"]),
            ("[spread]\nmin_holders = 0", ["spread.min_holders", "got 0"]),
            ("[report]\nround_degrees = 1e-300", ["report.round_degrees", "1e-300"]),
            ("[report]\nround_degrees = -1", ["report.round_degrees", "-1"]),
            ("[emergence]\npropensity='covariates'\ncovariates=['rain']", ["rain"]),
            ("no plan", ["plan.toml", "not valid TOML"]),
            ('{"no": "plan"}', ["plan.toml", '"plan"']),
        ],
    )
    def test_plan(self, text, said, run, catalogue, tmp_path):
        plan = tmp_path / "plan.toml"
        plan.write_text(text)
        before = everything(tmp_path)
        for command in (
            ("rank", catalogue, "--out", tmp_path / "out"),
            ("test", catalogue, "m1"),
        ):
            assert_refused(run(*command, "--plan", plan, "--draws", "499"), *said)
        assert everything(tmp_path) == before

    def test_plan_missing(self, run, catalogue, tmp_path):
        plan = tmp_path / "none.toml"
        assert_refused(run("check", catalogue, "--plan", plan), "none.toml", "cannot be read")

    def test_effort_column_named_by_the_plan(self, run, world, tmp_path):
        world["traditions"][0][5] = "texts"
        folder = put(world, tmp_path / "catalogue")
        plan = tmp_path / "plan.toml"
        plan.write_text("[catalogue]\neffort = 'texts'\n")
        assert "effort not given" in run("check", folder).out
        assert "effort given" in run("check", folder, "--plan", plan).out


class TestOutputs:
    def test_existing_folder_needs_force(self, run, catalogue, tmp_path):
        out = tmp_path / "out"
        assert run("rank", catalogue, "--out", out, *QUICK).code == 0
        before = everything(tmp_path)
        again = ("rank", catalogue, "--out", out, "--by", "holders", *QUICK)
        assert_refused(run(*again), "out exists", "--force")
        assert everything(tmp_path) == before
        assert run(*again, "--force").code == 0
        assert json.loads((out / "run.json").read_text())["by"] == "holders"
        assert not [p for p in tmp_path.iterdir() if p.name.startswith(".")]

    def test_a_folder_of_the_users_own_is_never_replaced(self, run, catalogue, tmp_path):
        before = everything(tmp_path)
        said = run("rank", catalogue, "--out", catalogue, "--force", *QUICK)
        assert_refused(said, "did not write")
        assert everything(tmp_path) == before

    def test_parent_missing_and_file_in_the_way(self, run, catalogue, tmp_path):
        assert_refused(run("rank", catalogue, "--out", tmp_path / "a" / "b", *QUICK), "folder")
        (tmp_path / "file").write_text("mine")
        assert_refused(run("rank", catalogue, "--out", tmp_path / "file", *QUICK, "--force"))
        assert (tmp_path / "file").read_text() == "mine"

    def test_plan_to_a_file(self, run, catalogue, tmp_path):
        out = tmp_path / "plan.toml"
        assert run("plan", catalogue, "--out", out, "--seed", "7").code == 0
        assert read_plan(out).evidence.seed == 7
        assert_refused(run("plan", catalogue, "--out", out), "exists", "--force")
        assert read_plan(out).evidence.seed == 7
        assert run("plan", catalogue, "--out", out, "--force").code == 0
        assert read_plan(out) == Plan()

    def test_plan_to_the_screen_writes_out_what_the_catalogue_decides(self, run, world, tmp_path):
        world["traditions"] = [row[:5] for row in world["traditions"]]
        said = run("plan", put(world, tmp_path / "catalogue"))
        assert said.code == 0
        (tmp_path / "p.toml").write_text(said.out)
        assert read_plan(tmp_path / "p.toml").emergence.propensity == "recorded"

    def test_example(self, run, tmp_path):
        said = run("example", tmp_path / "islands")
        assert said.code == 0
        assert "invented" in said.out
        checked = run("check", tmp_path / "islands")
        assert checked.out.splitlines()[-1] == "ready"
        assert "Invented demonstration data" in checked.out
        before = everything(tmp_path)
        assert_refused(run("example", tmp_path / "islands"), "exists")
        assert everything(tmp_path) == before


@pytest.fixture(scope="module")
def ranked(tmp_path_factory):
    """A run by one worker, and another from its record by two, in a process of its own."""
    folder = tmp_path_factory.mktemp("ranked")
    catalogue = put(small_world(), folder / "catalogue")
    plan = Plan().replace(evidence__worlds=("emergence", "ancestry"), evidence__draws=499)
    rank_run(catalogue, folder / "one", plan, pool=ThreadPool(1), by="moran_i")
    again = ("--plan", folder / "one" / "run.json", "--workers", 2)
    done = twicetold("rank", catalogue, "--out", folder / "again", *again)
    assert done.returncode == 0, done.stderr
    # Nothing is drawn when nobody looks: no bars, no codes.
    assert done.stderr == ""
    assert "\x1b" not in done.stdout
    return folder


class TestRuns:
    def test_workers_change_nothing_and_the_record_rebuilds_the_run(self, ranked):
        first, second = everything(ranked / "one"), everything(ranked / "again")
        assert {"motifs.csv", "run.json", "plan.toml", "index.html"} <= first.keys()
        assert json.loads(first["run.json"])["by"] == "moran_i"
        del first["timings.json"], second["timings.json"]  # seconds are not results
        assert first == second

    def test_one_motif_alone_as_in_the_catalogue(self, ranked, run):
        with (ranked / "one" / "motifs.csv").open(newline="") as file:
            rows = list(csv.DictReader(file))
        assert len(rows) == 7
        compared = 0
        for row in rows:
            said = run("test", ranked / "catalogue", row["motif_id"], "--json", *QUICK)
            alone = json.loads(said.out)
            for column, text in row.items():
                # Adjusted values and verdicts hang on the other motifs; all else does not.
                if column.startswith("q_") or column in ("rank", "verdict", "reason"):
                    continue
                value = alone.get(column)
                if text == "":
                    assert value is None, column
                elif isinstance(value, bool | str):
                    assert str(value) == text, column
                else:
                    assert value == float(text), column
                    compared += 1
        assert compared > 70

    def test_json_is_one_object_without_nan(self, run, world, tmp_path):
        extra("motifs", "m8", "the unheard", "sea", "")(world)
        folder = put(world, tmp_path / "catalogue")

        def refuse(word):
            raise AssertionError(word)

        for motif in ("m1", "m8"):
            said = run("test", folder, motif, "--json", *QUICK)
            assert said.code == 0
            record = json.loads(said.out, parse_constant=refuse)
            assert record["motif_id"] == motif
            assert said.err == ""

    def test_by_name_and_in_words(self, run, catalogue):
        said = run("test", catalogue, "the stone boat", *QUICK)
        assert said.code == 0
        assert "the stone boat" in said.out
        assert re.search(r"^emergence +joins +12 +[0-9.]+ +0\.00", said.out, re.MULTILINE)

    def test_withdrawal_says_what_moved(self, run, catalogue, tmp_path):
        out = tmp_path / "out"
        said = run("rank", catalogue, "--out", out, "--without", "t0", "--without", "t5", *QUICK)
        assert said.code == 0, said.err
        assert "Without the withdrawn traditions" in said.out
        assert (out / "tables" / "moved.csv").exists()
        record = json.loads((out / "run.json").read_text())
        assert record["plan"]["catalogue"]["without"] == ["t0", "t5"]
        assert record["catalogue"]["traditions"] == 18
        assert b"Place 5" not in b"".join(everything(out).values())


HEAVY = ("numpy", "pandas", "scipy", "numba", "statsmodels", "altair", "libpysal", "openpyxl")


class TestStart:
    @pytest.mark.parametrize(
        "code",
        [
            "import twicetold",
            "import twicetold.cli",
            "import sys, twicetold.cli as c; sys.argv[1:] = ['--help']\ntry: c.main()\n"
            "except SystemExit: pass",
            "import twicetold; twicetold.Plan; twicetold.TwicetoldError",
        ],
    )
    def test_nothing_heavy_is_loaded(self, code):
        check = f"{code}\nimport sys\nprint([m for m in {HEAVY} if m in sys.modules])"
        done = subprocess.run(
            [sys.executable, "-W", "error", "-c", check], capture_output=True, text=True, check=True
        )
        assert done.stdout.splitlines()[-1] == "[]"

    def test_help_and_version(self, run):
        said = run("--help")
        assert said.code == 0
        for command in ("example", "check", "plan", "test", "rank", "power", "supplement"):
            assert re.search(rf"^\s+{command}\b", said.out, re.MULTILINE)
        assert run("--version").out.startswith("twicetold ")

    def test_help_says_what_force_replaces(self, run):
        helps = {c: " ".join(run(c, "--help").out.split()) for c in ("plan", "rank", "supplement")}
        assert "Replace an earlier plan file." in helps["plan"]
        assert "folder" not in helps["plan"].split("--force")[1]
        for command in ("rank", "supplement"):
            assert "Replace an earlier run's folder." in helps[command]

    def test_no_words(self, run):
        assert "Usage" in (said := run()).out + said.err


@pytest.mark.skipif(sys.platform == "win32", reason="signals")
def test_full_screen_file_is_said_and_a_closed_pipe_is_no_fault(catalogue):
    command = f"{sys.executable} -m twicetold.cli plan {catalogue}"
    piped = f"set -o pipefail; {command} | true"
    done = subprocess.run(["bash", "-c", piped], capture_output=True, text=True, check=False)
    assert (done.returncode, done.stderr) == (0, "")
    if Path("/dev/full").exists():
        with open("/dev/full", "w") as full:
            done = subprocess.run(
                command.split(), stdout=full, stderr=subprocess.PIPE, text=True, check=False
            )
        assert done.returncode == 2
        assert done.stderr.startswith("twicetold: No space left")
        assert "Traceback" not in done.stderr


@pytest.mark.skipif(sys.platform == "win32", reason="signals")
def test_interrupt_ends_with_130_and_leaves_nothing(catalogue, tmp_path):
    before = everything(tmp_path)
    words = ["rank", catalogue, "--out", tmp_path / "out", "--draws", "20000000"]
    # Tests that run in the background of a shell inherit that interrupts are ignored.
    heeding = (
        "import runpy, signal; signal.signal(signal.SIGINT, signal.default_int_handler); "
        "runpy.run_module('twicetold.cli', run_name='__main__')"
    )
    process = subprocess.Popen(
        [sys.executable, "-c", heeding, *map(str, words)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env=os.environ | {"PYTHONUNBUFFERED": "1"},
    )
    time.sleep(4)
    assert process.poll() is None, process.stderr.read()
    process.send_signal(signal.SIGINT)
    out, err = process.communicate(timeout=60)
    assert process.returncode == 130, err
    assert "interrupted" in err
    assert "Traceback" not in err
    assert out == ""
    assert everything(tmp_path) == before
