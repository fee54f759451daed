"""Ten thousand invented ids of motifs that file systems would refuse, fold or follow as names.

    pytest -m reliability tests/reliability/test_ids_as_files.py -s

What it counted stands in reports/reliability/hostile.md.
"""

from __future__ import annotations

import csv
import json
import random
import re
import unicodedata
from pathlib import Path

import pytest

from small_world import put, small_world
from twicetold.catalogue import read_catalogue
from twicetold.plan import Plan
from twicetold.report import page_name
from twicetold.report.supplement import read_run
from twicetold.run import motif_run, rank_run
from twicetold.workers import ThreadPool

pytestmark = pytest.mark.reliability
MANY = 10_000
DEVICES = ("con", "prn", "aux", "nul", *(f"{d}{k}" for d in ("com", "lpt") for k in range(10)))
SIGNS = "/\\.:*?\"<>|%&#'`~^$!;,=+@()[]{}-_ "
LETTERS = "abcxyzABCXYZ0189éÉßİıſﬁœÅΩωжЖ漢字ሀꙮ𐌰😀\u0301\u200d\u00ad"
PATHS = ("../", "..\\", "/", "//", "C:\\", "file:///", "./", "~/", "..%2f", "\\\\host\\")


def invented(dice: random.Random) -> str:
    """One id: a path, a device, signs, letters of many scripts, very long, or another's twin."""
    kind = dice.randrange(8)
    word = "".join(dice.choices(LETTERS, k=dice.randint(1, 12)))
    if kind == 0:
        return dice.choice(PATHS) * dice.randint(1, 4) + word
    if kind == 1:
        device = dice.choice(DEVICES)
        device = "".join(dice.choice((c.upper(), c)) for c in device)
        return device + dice.choice(("", ".html", ".", " x", ".txt", ":", str(dice.randrange(999))))
    if kind == 2:
        return "".join(dice.choices(SIGNS, k=dice.randint(1, 20))) + str(dice.randrange(99))
    if kind == 3:
        return word * dice.randint(20, 60)
    if kind == 4:
        return word + dice.choice((".", "..", ". .", "...html", ".html", "/.", "\\"))
    if kind == 5:
        return f"{word}-{dice.getrandbits(48):012x}"
    if kind == 6:
        return "motif" + "".join(dice.choices("aA-_. ", k=8)) + str(dice.randrange(99))
    return word


def twins(text: str) -> set[str]:
    """What differs in case, in the form of its accents, or at its ends only."""
    forms = {unicodedata.normalize(form, text) for form in ("NFC", "NFD", "NFKC", "NFKD")}
    forms |= {text.upper(), text.lower(), text.swapcase(), text.casefold()}
    return forms | {text + " ", " " + text, text + "."}


def ten_thousand(*, in_tables: bool) -> list[str]:
    """Different ids; as tables hold them (trimmed, of at most 200 characters) or any."""
    dice = random.Random("ids")
    wild = [*DEVICES, ".", "..", "...", "index", "INDEX", "m1", "M1", "a/b", "a\\b", "a-b"]
    found: dict[str, None] = {}
    while len(found) < MANY:
        for text in wild:
            kept = text.strip() if in_tables else text
            if not in_tables or 0 < len(kept) <= 200:
                found.setdefault(kept)
        text = invented(dice)
        wild = [text, *sorted(twins(text))]
    return list(found)[:MANY]


def assert_names_are_safe(names: list[str]) -> None:
    for name in names:
        # Portable anywhere: no capitals to fold, no signs, no device, far under 255 bytes.
        assert re.fullmatch(r"[a-z0-9][a-z0-9_-]*\.html", name), name
        assert len(name) <= 100
        assert name.removesuffix(".html") not in DEVICES, name
    assert len({name.casefold() for name in names}) == len(names)


def test_every_id_has_a_file_of_its_own(tmp_path):
    ids = ten_thousand(in_tables=False)
    names = [page_name(motif) for motif in ids]
    assert_names_are_safe(names)
    for name, motif in zip(names, ids, strict=True):
        (tmp_path / name).write_bytes(motif.encode())
    assert sorted(p.name for p in tmp_path.iterdir()) == sorted(names)
    for name, motif in zip(names, ids, strict=True):
        assert (tmp_path / name).read_bytes() == motif.encode()
    print(f"\n{len(ids):,} ids, {len(set(names)):,} file names")


def test_ranked_and_told_with_such_ids(tmp_path, monkeypatch):
    """The same ids as motifs of a catalogue: read, ranked, written, read back."""
    ids = ten_thousand(in_tables=True)
    world, dice = small_world(), random.Random(2)
    world["motifs"] = [world["motifs"][0], *([m, f"motif {k}", "", ""] for k, m in enumerate(ids))]
    world["attestations"] = [world["attestations"][0]]
    for m in ids:
        for k in sorted(dice.sample(range(20), dice.randint(2, 9))):
            world["attestations"].append([m, f"t{k}", ""])
    place = tmp_path / "place"
    source = put(world, place / "catalogue")
    taken = tuple(read_catalogue(source).motif_ids)
    assert sorted(taken) == sorted(ids)
    before = {p.relative_to(tmp_path) for p in tmp_path.rglob("*")}
    plan = Plan().replace(
        evidence__worlds=("emergence",), evidence__draws=99, sensitivity__hidden=False
    )
    monkeypatch.chdir(place)
    rank_run(source, Path("RUN"), plan, pool=ThreadPool(), cache=False)
    run = place / "RUN"
    names = [p.name for p in (run / "motifs").iterdir() if p.suffix == ".html"]
    assert sorted(names) == sorted(page_name(m) for m in taken)
    assert_names_are_safe(names)
    beside = {p.relative_to(tmp_path) for p in tmp_path.rglob("*")} - before
    assert all(p.parts[:2] == ("place", "RUN") for p in beside)
    with (run / "motifs.csv").open(newline="", encoding="utf-8") as file:
        written = [row["motif_id"] for row in csv.DictReader(file)]
    assert sorted(written) == sorted(taken)
    assert sorted(read_run(run).catalogue.motif_ids) == sorted(taken)
    for m in dice.sample(sorted(taken), 40):
        page = (run / "motifs" / page_name(m)).read_text(encoding="utf-8")
        assert "<html" in page
        text = motif_run(source, m, plan, pool=ThreadPool(), as_json=True, cache=False)
        assert json.loads(text)["motif_id"] == m
    print(f"\n{len(taken):,} ids through rank: {len(names):,} pages, nothing outside the folder")
