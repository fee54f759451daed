"""Hostile plans, records, neighbour files and run folders: answers in words, no traceback."""

from __future__ import annotations

import json
import os
import re
import shutil
import tempfile
import time
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from hostile_counts import counted, took, write_counts
from small_world import put, small_world
from twicetold.errors import GraphError, PlanError, TwicetoldError
from twicetold.graph.exchange import read_neighbours
from twicetold.plan import Plan, plan_from_mapping, read_plan, recorded_order
from twicetold.report.common import page_name
from twicetold.run import rank_run, supplement_run
from twicetold.workers import ThreadPool

SECONDS = 5.0  # of processor time
QUIET = [HealthCheck.too_slow, HealthCheck.filter_too_much]
FEW = settings(deadline=None, suppress_health_check=QUIET)
# By hand: new inputs every time.
MANY = settings(FEW, derandomize=False, database=None)

# ---- what is thrown ----------------------------------------------------------------------------

ODD = st.sampled_from(
    [
        *("", "\x00", "\u202e", "\ud7ff", "a" * 3000, "'''", '"""', "\\u0000", "%s%n", "../../x"),
        *("nearest:6", "nearest:0", "nearest:" + "9" * 5000, "within:1e999", "within:" + "9" * 400),
        *("given:", "given:/", "given:\x00.gal", "given:x.gwt", "delaunay ", "nearest:٣"),
    ]
)
NUMBERS = st.one_of(
    st.integers(-3, 3),
    st.integers(),
    st.floats(),
    st.sampled_from([10**400, -(10**400), 10**4000, 2**63]),
)
VALUES = st.recursive(
    st.one_of(st.none(), st.booleans(), NUMBERS, ODD, st.text(max_size=12)),
    lambda inner: st.one_of(
        st.lists(inner, max_size=3), st.dictionaries(st.text(max_size=6), inner, max_size=3)
    ),
    max_leaves=5,
)
SECTIONS = st.one_of(*[st.sampled_from(sorted(Plan().to_mapping()))] * 3, st.text(max_size=8))
KEYS = st.one_of(
    st.sampled_from(sorted({k for v in Plan().to_mapping().values() for k in v})),
    st.text(max_size=8),
)
PLANS = st.dictionaries(
    SECTIONS, st.one_of(st.dictionaries(KEYS, VALUES, max_size=4), VALUES), max_size=4
)
LINES = st.sampled_from(
    [
        *("[", "[[evidence]]", "[evidence]", "evidence.draws = 5", "draws = 1979-05-27T07:32:00Z"),
        *("draws = 0x" + "F" * 6000, "draws = " + "9" * 5000, "alpha = 1" + "0" * 400),
        *("alpha = inf", "alpha = nan", "seed = -0", "a = " + "[" * 900, 'rule = "\\u0000"'),
        *('rule = "given:\\u0000.gal"', "x = {a = {a = {a = 1}}}", "worlds = [[]]", "= 1", "#\x07"),
    ]
)
BYTES = st.lists(st.tuples(st.floats(0, 1), st.integers(0, 40), st.binary(max_size=6)), max_size=4)
WORDS = st.one_of(
    st.sampled_from(["t0", "t1", "t19", "20", "1", "0", "-1", "9" * 5000, "1e3", "\x00", "x", "٣"]),
    st.text(max_size=5),
)


@pytest.fixture(scope="module", autouse=True)
def counts(request):
    """Put what a marked run threw into the report."""
    yield
    if request.config.option.markexpr == "calibration":
        write_counts()


def damaged(raw: bytes, damage) -> bytes:
    for at, cut, put_in in damage:
        place = int(at * len(raw))
        raw = raw[:place] + put_in + raw[place + cut :]
    return raw


def answer(function, *args, kinds=(TwicetoldError,), **kw):
    """Call; a wrong input must be said as one of ``kinds``, in words, and soon."""
    start, said = time.process_time(), ""
    try:
        function(*args, **kw)
    except kinds as err:
        said = str(err)
        # Problems of a catalogue are collected, each a line of its own.
        parts = list(map(str, getattr(err, "problems", [said])))
        assert parts
        assert len(parts) < 500
        assert all(0 < len(part) < 2_000 for part in parts), said
        assert said.replace("\n", "").isprintable(), said
        said.encode("utf-8")
    finally:
        spent = time.process_time() - start
    assert spent < SECONDS
    took(spent)
    return said


def in_file(name: str, raw: bytes, function) -> str:
    folder = Path(tempfile.mkdtemp())
    try:
        (folder / name).write_bytes(raw)
        return function(folder / name)
    finally:
        shutil.rmtree(folder)


# ---- plans -------------------------------------------------------------------------------------


def fuzz_plan(lines, damage) -> None:
    raw = Plan().to_toml().encode()
    text = b"\n".join([raw, *(x.encode("utf-8", "replace") for x in lines)])
    raw = damaged(text, damage)
    said = in_file("plan.toml", raw, lambda p: answer(read_plan, p, kinds=(PlanError,)))
    counted("plan as TOML", said)


def fuzz_mapping(raw) -> None:
    counted("plan as values", answer(plan_from_mapping, raw, kinds=(PlanError,)))


def fuzz_record(raw, damage, nested) -> None:
    text = json.dumps({"plan": raw, "by": "evidence"} if nested else raw, default=str)
    data = damaged(text.encode("utf-8", "surrogatepass"), damage)

    def both(path):
        said = answer(read_plan, path, kinds=(PlanError,))
        return answer(recorded_order, path, kinds=(PlanError,)) or said

    counted("run.json as a plan", in_file("run.json", data, both))


def fuzz_neighbours(kind, rows, damage) -> None:
    text = "\n".join(" ".join(words) for words in rows)
    raw = damaged(text.encode("utf-8", "replace"), damage)
    ids = [f"t{k}" for k in range(20)]

    def read(path):
        return answer(read_neighbours, path, ids, kinds=(GraphError,))

    counted("neighbour files (GAL, GWT)", in_file(f"x{kind}", raw, read))


ROWS = st.one_of(
    st.lists(st.lists(WORDS, max_size=4), max_size=6),
    st.lists(st.lists(WORDS, min_size=1, max_size=4), max_size=4).map(lambda r: [["2"], *r]),
)
KINDS = st.sampled_from([".gal", ".gwt", ".GAL", ".txt"])


@given(lines=st.lists(LINES, max_size=3), damage=BYTES)
@settings(FEW, max_examples=200)
def test_any_plan(lines, damage):
    fuzz_plan(lines, damage)


@given(raw=PLANS)
@settings(FEW, max_examples=300)
def test_any_plan_values(raw):
    fuzz_mapping(raw)


@given(raw=PLANS, damage=BYTES, nested=st.booleans())
@settings(FEW, max_examples=200)
def test_any_record(raw, damage, nested):
    fuzz_record(raw, damage, nested)


@given(kind=KINDS, rows=ROWS, damage=BYTES)
@settings(FEW, max_examples=200)
def test_any_neighbours(kind, rows, damage):
    fuzz_neighbours(kind, rows, damage)


@pytest.mark.calibration
@given(lines=st.lists(LINES, max_size=3), damage=BYTES)
@settings(MANY, max_examples=10_000)
def test_very_many_plans(lines, damage):
    fuzz_plan(lines, damage)


@pytest.mark.calibration
@given(raw=PLANS)
@settings(MANY, max_examples=10_000)
def test_very_many_plan_values(raw):
    fuzz_mapping(raw)


@pytest.mark.calibration
@given(raw=PLANS, damage=BYTES, nested=st.booleans())
@settings(MANY, max_examples=10_000)
def test_very_many_records(raw, damage, nested):
    fuzz_record(raw, damage, nested)


@pytest.mark.calibration
@given(kind=KINDS, rows=ROWS, damage=BYTES)
@settings(MANY, max_examples=10_000)
def test_very_many_neighbours(kind, rows, damage):
    fuzz_neighbours(kind, rows, damage)


def test_endless_files_are_not_read_to_their_end(tmp_path):
    endless = tmp_path / "plan.toml"
    endless.symlink_to("/dev/zero")
    assert "over 1 MB" in answer(read_plan, endless)
    for kind in (".gal", ".gwt"):
        link = tmp_path / f"x{kind}"
        link.symlink_to("/dev/zero")
        assert "not a file" in answer(read_neighbours, link, ["a"])
        pipe = tmp_path / f"pipe{kind}"
        os.mkfifo(pipe)
        assert "not a file" in answer(read_neighbours, pipe, ["a"])


def test_folder_or_nothing_in_place_of_a_file(tmp_path):
    (tmp_path / "x.gal").mkdir()
    answer(read_plan, tmp_path / "x.gal", kinds=(PlanError,))
    assert answer(read_neighbours, tmp_path / "x.gal", ["a"])
    assert answer(read_neighbours, tmp_path / "none.gal", ["a"])
    assert answer(read_neighbours, "nul\x00.gal", ["a"])
    assert answer(read_plan, "nul\x00.toml")


# ---- ids as file names ---------------------------------------------------------------------------

IDS = st.one_of(
    st.text(max_size=300),
    st.sampled_from(
        [
            "../../etc",
            "/",
            "\\",
            "nul",
            "COM1",
            ".",
            "..",
            "a\x00b",
            "a.",
            " a",
            "~",
            "%2e%2e",
            "-rf",
        ]
    ),
    st.text(alphabet="abcABC-_.012/\\", max_size=20),
)


def fuzz_names(ids) -> None:
    names = [page_name(motif) for motif in ids]
    for name in names:
        assert re.fullmatch(r"[a-z0-9][a-z0-9_-]*\.html", name), name
        assert len(name) <= 100
        assert not re.fullmatch(r"(con|prn|aux|nul|com[0-9]|lpt[0-9])\.html", name)
    assert len(set(names)) == len(ids)
    counted("motif ids as file names", "")


@given(ids=st.lists(IDS, max_size=6, unique=True))
@settings(FEW, max_examples=200)
def test_any_ids_as_file_names(ids):
    fuzz_names(ids)


@pytest.mark.calibration
@given(ids=st.lists(IDS, max_size=6, unique=True))
@settings(MANY, max_examples=10_000)
def test_very_many_ids_as_file_names(ids):
    fuzz_names(ids)


# ---- run folders -------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def finished(tmp_path_factory) -> dict[str, bytes]:
    """Files of a small finished run, by name."""
    folder = tmp_path_factory.mktemp("run")
    source = put(small_world(), folder / "tables")
    plan = Plan().replace(
        evidence__worlds=("emergence", "ancestry"), evidence__draws=99, sensitivity__hidden=False
    )
    rank_run(source, folder / "RUN", plan, pool=ThreadPool(1), cache=False)
    run = folder / "RUN"
    return {
        p.relative_to(run).as_posix(): p.read_bytes()
        for p in sorted(run.rglob("*"))
        if p.is_file() and p.suffix in (".csv", ".toml", ".json") and "figures" not in p.parts
    }


FILES = st.sampled_from(
    ["motifs.csv", "plan.toml", "run.json", "contacts.csv", "catalogue/traditions.csv",
     "catalogue/motifs.csv", "catalogue/attestations.csv", "catalogue/about.toml",
     "tables/needed.csv"]
)  # fmt: skip
HURT = st.lists(
    st.tuples(
        FILES,
        st.one_of(
            st.tuples(st.just("bytes"), BYTES),
            st.tuples(st.just("all"), st.one_of(st.binary(max_size=8), st.just(b"{}\n"))),
            st.tuples(st.just("gone"), st.none()),
            st.tuples(st.just("line"), st.tuples(st.floats(0, 1), st.binary(max_size=12))),
        ),
    ),
    min_size=1,
    max_size=3,
)


def hurt_run(finished, hurts, folder: Path) -> None:
    files = dict(finished)
    for name, (how, what) in hurts:
        raw = files.get(name, b"")
        if how == "bytes":
            files[name] = damaged(raw, what)
        elif how == "all":
            files[name] = what
        elif how == "gone":
            files.pop(name, None)
        else:
            lines = raw.split(b"\n")
            lines[int(what[0] * (len(lines) - 1))] = what[1]
            files[name] = b"\n".join(lines)
    for name, raw in files.items():
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        (folder / name).write_bytes(raw)


def fuzz_run(finished, hurts, *, whole: bool) -> None:
    from twicetold.report.supplement import read_run

    folder = Path(tempfile.mkdtemp())
    try:
        hurt_run(finished, hurts, folder / "RUN")
        if whole:
            said = answer(
                supplement_run,
                folder / "RUN",
                folder / "out",
                cldf=False,
                force=False,
                pool=ThreadPool(1),
                rounded=False,
            )
            assert not said or not (folder / "out").exists()
            counted("run folders through supplement", said)
        else:
            counted("run folders", answer(read_run, folder / "RUN"))
    finally:
        shutil.rmtree(folder)


@given(hurts=HURT)
@settings(FEW, max_examples=60)
def test_any_run_folder(finished, hurts):
    fuzz_run(finished, hurts, whole=False)


@pytest.mark.calibration
@given(hurts=HURT)
@settings(MANY, max_examples=4_000)
def test_very_many_run_folders(finished, hurts):
    fuzz_run(finished, hurts, whole=False)


@pytest.mark.calibration
@given(hurts=HURT)
@settings(MANY, max_examples=300)
def test_many_run_folders_through_supplement(finished, hurts):
    fuzz_run(finished, hurts, whole=True)
