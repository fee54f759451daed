"""Pages by their text: what stands on them, that nothing in them runs, and how large they are."""

from __future__ import annotations

import json
import re
from html.parser import HTMLParser
from types import SimpleNamespace

import factory
import numpy as np
import pandas as pd
import pytest
from factory import COMMAND

from twicetold.report import page_name, write_pages, write_power
from twicetold.report.common import number, percent, probability
from twicetold.report.methods import methods
from twicetold.report.words import CAUTIONS, verdict_counts

ARABIC, DEVANAGARI = factory.ODD_NAMES[1:3]


class Page(HTMLParser):
    """Text of a page without its scripts, its links, its elements and its script elements."""

    def __init__(self, html):
        super().__init__(convert_charrefs=True)
        self.links, self.tags, self.ids, self.scripts, self.data = [], [], [], [], []
        self._inside, self.json = "", {}
        self.feed(html)
        self.text = re.sub(r"[ \t\n]+", " ", " ".join(self.data))

    def handle_starttag(self, tag, attrs):
        attrs = dict(attrs)
        self.tags.append((tag, attrs))
        self.links += [attrs[k] for k in ("href", "src") if k in attrs]
        self.ids += [attrs["id"]] if "id" in attrs else []
        self._inside = tag if tag in ("script", "style") else self._inside
        if tag == "script":
            self.scripts.append(attrs)

    def handle_endtag(self, tag):
        self._inside = ""

    def handle_data(self, data):
        if not self._inside:
            self.data.append(data)
        elif self._inside == "script" and "id" in self.scripts[-1]:
            self.json[self.scripts[-1]["id"]] = json.loads(data)


def read(path):
    return Page(path.read_text(encoding="utf-8"))


@pytest.fixture(scope="module")
def motif(pages):
    return read(pages / "motifs" / "m008.html")


@pytest.fixture(scope="module")
def index(pages):
    return read(pages / "index.html")


def own(ranking, motif_id="m008"):
    return next(e for e in ranking.evidence if e.motif_id == motif_id)


def test_a_motif_page_says_what_it_must(rich, motif):
    e = own(rich)
    wanted = [
        e.name,
        str(e.row["verdict"])[1:],
        rich.catalogue.notice,
        "emergence-only",
        "ancestry-only",
        "contact-only",
        "transmission-only",
        percent(e.row["stability"]),
        f"log-sd {number(e.hidden_bound['log_sd'])}",
        "twicetold test isles m008 --plan plan.toml",
        f"seed {rich.plan.evidence.seed}",
        *[heading for heading, _ in CAUTIONS],
        *[probability(c.p) for c in e.comparisons],
        *[
            f"{percent(low)} to {percent(high)}"
            for low, high in zip(e.shares.low, e.shares.high, strict=True)
        ],
    ]
    assert [w for w in wanted if w not in motif.text] == []


def test_a_motif_page_has_its_figures_and_the_numbers_behind_them(motif):
    assert set(motif.json) == {
        "figure-map",
        "figure-correlogram",
        "figure-shares",
        "figure-stability",
        "figure-power",
        *(f"figure-world-{w}" for w in ("emergence", "ancestry", "contact", "transmission")),
    }
    # What pages share is named, not repeated.
    spec = motif.json["figure-map"]
    assert spec["usermeta"]["shared"] == ["land", "edges", "traditions"]
    assert set(spec["datasets"]) == {"joins", "cells"}


def test_the_run_page_says_what_it_must(rich, index):
    for verdict, count in verdict_counts(rich).items():
        assert f"{count} {verdict}" in index.text
    for text in (rich.catalogue.title, rich.catalogue.notice, *rich.notes, COMMAND["rank"]):
        assert text in index.text
    for w in rich.catalogue.warnings:
        assert w.what in index.text
    assert {"figure-clusters", "figure-prevalence", "figure-qq"} <= set(index.json)
    assert {"figure-categories", "figure-ratios", "figure-map"} <= set(index.json)


def test_pages_read_well_without_the_optional_parts(bare, bare_pages):
    page = read(bare_pages / "motifs" / "m007.html")
    assert set(page.json) == {"figure-map", "figure-world-emergence"}
    index = read(bare_pages / "index.html")
    assert set(index.json) == {"figure-clusters", "figure-qq", "figure-map"}
    for path in (bare_pages / "index.html", *sorted((bare_pages / "motifs").iterdir())):
        text = read(path).text
        assert not re.search(r"\b(nan|None|NaN|undefined)\b", text), path.name
    assert "famil" not in methods(bare).paragraphs[-3]


def test_names_from_the_catalogue_are_text_and_never_run(rich, pages):
    for path in pages.rglob("*.html"):
        page = read(path)
        allowed = {"vega.js", "shared.js", "page.js", "motifs.js", "table.js"}
        for script in page.scripts:
            if script.get("type") == "application/json":
                continue
            assert script.get("src", "").rsplit("/", 1)[-1] in allowed
        assert not [a for _, attrs in page.tags for a in attrs if a.startswith("on")]
        assert "<script>alert" not in path.read_text(encoding="utf-8")
    script = read(pages / "motifs" / page_name(factory.ODD_IDS[0]))
    assert "<script>alert(1)</script>" in script.text
    assert ARABIC in read(pages / "motifs" / page_name("CON")).text
    assert DEVANAGARI in read(pages / "motifs" / page_name("Case")).text
    for name in ("shared.js", "motifs.js"):
        assert "</script" not in (pages / "assets" / name).read_text(encoding="utf-8")


def test_text_that_may_run_the_other_way_says_so(pages):
    page = read(pages / "motifs" / page_name("CON"))
    heading = next(attrs for tag, attrs in page.tags if tag == "h1")
    assert heading["dir"] == "auto"


def test_nothing_is_fetched_from_anywhere(pages):
    for path in [*pages.rglob("*.html"), *pages.rglob("*.css")]:
        text = path.read_text(encoding="utf-8")
        assert not re.search(r"(?:src|href)=\"(?:https?:)?//|@import|url\(\s*['\"]?http", text)


def test_every_link_leads_somewhere(pages):
    # motifs.csv is written by the run itself.
    there = {p.resolve() for p in pages.rglob("*")} | {(pages / "motifs.csv").resolve()}
    for path in pages.rglob("*.html"):
        page = read(path)
        for link in page.links:
            if link.startswith("#"):
                assert link[1:] in page.ids or link == "#", (path.name, link)
            elif not link.startswith("data:"):
                assert (path.parent / link).resolve() in there, (path.name, link)
        assert len(page.ids) == len(set(page.ids)), path.name


def test_ids_that_differ_in_case_or_in_odd_signs_keep_their_own_pages(rich, pages):
    names = [page_name(m) for m in rich.catalogue.motif_ids]
    assert len({n.lower() for n in names}) == len(names)
    assert all(re.fullmatch(r"[a-z0-9][a-z0-9_-]*\.html", n) for n in names)
    files = {p.name for p in (pages / "motifs").iterdir()}
    restricted = rich.catalogue.motif_ids[6]
    assert files == {page_name(m) for m in rich.catalogue.motif_ids if m != restricted}


def test_restricted_names_stand_on_no_page(rich, pages):
    tradition = rich.catalogue.tradition_names[5]
    motif_name = rich.catalogue.motif_names[6]
    for path in pages.rglob("*"):
        if path.is_file() and path.name != "vega.js":
            text = path.read_text(encoding="utf-8")
            assert not re.search(rf"{re.escape(tradition)}\b", text), path
            assert not re.search(rf"{re.escape(motif_name)}\b", text), path


def test_a_motif_page_stays_small_also_with_a_thousand_traditions(tmp_path):
    ranking = factory.make_ranking(1000, 9)
    write_pages(ranking, tmp_path, command=COMMAND)
    sizes = [p.stat().st_size for p in (tmp_path / "motifs").iterdir()]
    assert max(sizes) < 300_000


def test_the_same_results_give_the_same_bytes(rich, pages, tmp_path):
    write_pages(rich, tmp_path, command=COMMAND)
    for path in pages.rglob("*"):
        if path.is_file():
            assert path.read_bytes() == (tmp_path / path.relative_to(pages)).read_bytes(), path


def test_one_motif_alone_is_the_front_page(rich, tmp_path):
    alone = factory.alone(rich, "m008")
    write_pages(alone, tmp_path, command={"test": "twicetold test isles m008 --plan plan.toml"})
    page = read(tmp_path / "index.html")
    assert own(rich).name in page.text
    assert "one motif alone has no q" in page.text
    assert not (tmp_path / "motifs").exists()
    assert all((tmp_path / link).exists() for link in page.links if link.startswith("assets"))


def test_the_table_of_motifs_holds_every_number_of_the_ranking(rich, pages):
    text = (pages / "assets" / "motifs.js").read_text(encoding="utf-8")
    data = json.loads(json.loads(re.search(r"JSON\.parse\((.*)\);\s*$", text)[1]))
    rows = [e.row for e in rich.evidence if e.index != 6]
    assert data["ids"] == [r["motif_id"] for r in rows]
    for column, values in zip(data["columns"], data["data"], strict=True):
        for k, r in enumerate(rows):
            held = r[column["name"]]
            if "levels" in values:
                assert values["levels"][values["codes"][k]] == held
            elif held != held:  # noqa: PLR0124
                assert values["v"][k] is None
            else:
                assert values["v"][k] == pytest.approx(held, rel=1e-3)


def test_the_methods_follow_the_plan_and_the_results(rich, bare):
    made = methods(rich)
    text = " ".join(made.paragraphs)
    assert f"{rich.catalogue.n_traditions} traditions" in text
    assert number(rich.plan.evidence.draws) in text
    assert "(0.95, 95 % interval 0.93 to 0.968)" in text
    assert "p = 0.41" in text
    assert rich.plan.digest()[:12] in text
    assert "proportional to the amount collected" in text
    assert "another contact graph (nearest:4, nearest:5, nearest:8, gabriel)" in text
    assert "a region left out (30 in turn)" in text
    plain = " ".join(methods(bare).paragraphs)
    assert "equal for all traditions" in plain
    for absent in ("spread chain", "strands", "different families", "posterior"):
        assert absent in text
        assert absent not in plain
    changed = factory.with_plan(
        rich, spread__turnover=0.9, evidence__multiplicity="by", emergence__propensity="margins"
    )
    other = " ".join(methods(changed).paragraphs)
    assert "was set to 0.9" in other
    assert "valid under any dependence (Benjamini & Yekutieli 2001)" in other
    assert "Besag & Clifford 1989" in other


def test_every_work_cited_is_in_the_list_and_no_other(rich, pages):
    made = methods(rich)
    text = " ".join(made.paragraphs)
    cited = set(
        re.findall(r"([A-Z][A-Za-z]+(?:(?:, [A-Z][a-z]+)* & [A-Z][a-z]+| et al\.)? \d{4})", text)
    )
    bib = (pages / "references.bib").read_text(encoding="utf-8")
    keys = re.findall(r"@\w+\{(\w+),", bib)
    assert sorted(keys) == sorted(made.cited)
    assert len(cited) == len(keys)
    assert bib.count("{") == bib.count("}")
    markdown = (pages / "methods.md").read_text(encoding="utf-8")
    assert all(p in markdown for p in made.paragraphs)
    assert all(key in markdown for key, _, _ in rich.plan.choices())


def power_table():
    rng = np.random.default_rng(5)
    rows = [
        {"holders": n, "truth": t, "verdict": v, "probability": p, "low": p * 0.9, "high": p}
        for n in (3, 10, 30)
        for t in ("contact", "emergence <b>")
        for v, p in zip(factory.VERDICTS, rng.dirichlet(np.ones(5)), strict=True)
    ]
    smallest = pd.DataFrame(
        {
            "truth": ["contact", "emergence <b>"],
            "verdict": ["contact spread", "parallel emergence"],
            "holders": [30, np.nan],
        }
    )
    return SimpleNamespace(frame=pd.DataFrame(rows), smallest=smallest)


def test_the_power_page_is_complete_in_itself(tmp_path):
    table = power_table()
    write_power(table, tmp_path, notice="Invented data.")
    page = read(tmp_path / "power.html")
    assert "Invented data." in page.text
    assert "If the truth is emergence <b>" in page.text
    assert "more than were tried" in page.text
    assert page.scripts == []
    assert {link for link in page.links if not link.startswith(("#", "data:"))} == {"power.svg"}
    for p in table.frame["probability"]:
        assert percent(p, 1) in page.text
    svg = (tmp_path / "power.svg").read_text(encoding="utf-8")
    assert "Invented data." in svg
    assert svg.count(">If the truth is") == 2
