"""Hostile plans, records, neighbour files and run folders: answers in words, no traceback.

Many more, new ones every time, with counts for reports/reliability/hostile.md:

    pytest -m calibration tests/test_hostile_plan.py
"""

from __future__ import annotations

import json
import os
import re
import shutil
import tempfile
import time
import tomllib
import warnings
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
from twicetold.run import rank_run, resolved_plan, supplement_run
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


def among(*weighted):
    """One of several strategies by weight (`one_of` counts a branch given twice as one)."""
    kinds = [strategy for weight, strategy in weighted for _ in range(weight)]
    return st.integers(0, len(kinds) - 1).flatmap(kinds.__getitem__)


SECTIONS = among((9, st.sampled_from(sorted(Plan().to_mapping()))), (1, st.text(max_size=8)))
KEYS = among(
    (9, st.sampled_from(sorted({k for v in Plan().to_mapping().values() for k in v}))),
    (1, st.text(max_size=8)),
)
PLANS = st.dictionaries(
    SECTIONS, among((9, st.dictionaries(KEYS, VALUES, max_size=4)), (1, VALUES)), max_size=4
)
# Plans that come far: keys in their own sections, values of the right kind, in and out of range.
RULES = st.sampled_from(
    [
        *("nearest:1", "nearest:6", "nearest:19", "nearest:40", "nearest:41", "nearest:0"),
        *("within:0", "within:1e-9", "within:0.001", "within:300", "within:99999", "within:nan"),
        *("delaunay", "gabriel", "given", "given:nowhere.gal", "given:.", "nearest:06"),
    ]
)
TEXTS = st.one_of(
    st.sampled_from(
        [
            *("any", "searched", "not searched", "effort", "family", "branch", "region", "access"),
            *("latitude", "name", "fit", "complete", "equal", "recorded", "covariates", "margins"),
            *("none", "bh", "by", "t0", "t99", " ", "rain"),
        ]
    ),
    RULES,
    ODD,
)
SIZES = st.one_of(
    st.sampled_from([0, 1, 2, 3, 19, 20, 21, 50, 99, 100, 499, 1000, 2**31, 2**63 - 1, -1, 10**19]),
    st.integers(0, 60),
)
REALS = st.one_of(
    st.sampled_from([0.0, -0.0, 1e-300, 1e-5, 0.05, 0.5, 0.999999, 1.0, 1.5, 10.0, 100.0, 1e300]),
    st.floats(0, 12),
    SIZES,
)
LISTS = {
    "worlds": st.sampled_from(["emergence", "ancestry", "contact", "transmission", "shares"]),
    "graphs": RULES,
    "exponents": REALS,
    "reaches": REALS,
    "covariates": st.sampled_from(["rain", "flat", "holes", "effort", "nothing"]),
    "without": st.sampled_from([*(f"t{k}" for k in range(20)), "t99"]),
}


def value_for(key, default):
    """Values of a key: mostly of its kind, now and then anything."""
    if key in LISTS:
        kind = st.lists(LISTS[key], max_size=4)
    elif key in ("rule", "presence"):
        kind = RULES if key == "rule" else TEXTS
    elif isinstance(default, bool):
        kind = st.booleans()
    elif isinstance(default, int):
        kind = SIZES
    elif isinstance(default, float):
        kind = REALS
    else:
        kind = st.one_of(TEXTS, REALS) if key == "turnover" else TEXTS
    return among((2, st.just(default)), (7, kind), (1, VALUES))


DEEP = st.fixed_dictionaries(
    {},
    optional={
        section: st.fixed_dictionaries(
            {}, optional={key: value_for(key, default) for key, default in keys.items()}
        )
        for section, keys in Plan().to_mapping().items()
    },
)
# One key at a time away from its default: what is wrong with a plan is then that key.
SINGLE = st.sampled_from(
    [(s, key, d) for s, keys in Plan().to_mapping().items() for key, d in keys.items()]
).flatmap(lambda one: value_for(*one[1:]).map(lambda value: {one[0]: {one[1]: value}}))
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


def answer(function, *args, kinds=(TwicetoldError,), seconds=SECONDS, **kw):
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
    assert spent < seconds
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


@pytest.fixture(scope="module")
def tables(tmp_path_factory) -> Path:
    """A small catalogue with covariates that vary, that do not, and that have holes."""
    world = small_world()
    world["traditions"][0] += ["rain", "flat", "holes"]
    for k, row in enumerate(world["traditions"][1:]):
        row += [str(7 * k % 11), "3", "" if k == 4 else str(k)]
    return put(world, tmp_path_factory.mktemp("tables") / "catalogue")


def fuzz_prepared(tables, raw) -> None:
    """A plan that reads is laid over a catalogue, written out, and means the same read again."""

    def prepared():
        plan = plan_from_mapping(raw)
        assert plan_from_mapping(tomllib.loads(plan.to_toml())) == plan
        resolved = resolved_plan(tables, plan)
        assert plan_from_mapping(tomllib.loads(resolved.to_toml())) == resolved
        assert resolved_plan(tables, resolved) == resolved

    counted("plan, deep, laid over a catalogue", answer(prepared))


def fuzz_ranked(tables, raw) -> None:
    """What `twicetold plan` would write, `rank` does not refuse."""
    folder = Path(tempfile.mkdtemp())
    try:
        said = answer(lambda: resolved_plan(tables, plan_from_mapping(raw)))
        if not said:
            plan = plan_from_mapping(raw)
            worlds = tuple(w for w in plan.evidence.worlds if w != "shares") or ("emergence",)
            quick = {
                "evidence__worlds": worlds,
                "evidence__draws": min(plan.evidence.draws, 499),
                "evidence__walks": min(plan.evidence.walks, 200),
                "sensitivity__draws": 99,
            }
            plan = plan.replace(**quick)
            out = folder / "RUN"
            with warnings.catch_warnings():
                warnings.simplefilter("error")
                refused = answer(
                    lambda: rank_run(tables, out, plan, pool=ThreadPool(1), cache=False),
                    seconds=120.0,
                )
            assert refused == ""
            assert (out / "motifs.csv").exists()
        counted("plan, deep, through rank", said)
    finally:
        shutil.rmtree(folder)


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


@given(raw=st.one_of(DEEP, SINGLE))
@settings(FEW, max_examples=120)
def test_any_plan_over_a_catalogue(tables, raw):
    fuzz_prepared(tables, raw)


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
@given(raw=st.one_of(DEEP, SINGLE))
@settings(MANY, max_examples=10_000)
def test_very_many_plans_over_a_catalogue(tables, raw):
    fuzz_prepared(tables, raw)


@pytest.mark.calibration
@given(raw=SINGLE)
@settings(MANY, max_examples=400)
def test_many_plans_through_rank(tables, raw):
    fuzz_ranked(tables, raw)


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
