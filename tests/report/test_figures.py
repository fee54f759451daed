"""Figures by their structure: what is drawn, from which data, and that every format comes out."""

from __future__ import annotations

import itertools
import json
import re

import altair as alt
import numpy as np
import pytest

from twicetold.report import FigureError, figure, save_figure
from twicetold.report.common import listed
from twicetold.report.figures import MOTIF_KINDS, RANKING_KINDS, specification
from twicetold.report.motif_charts import drawn_comparisons, world_chart
from twicetold.report.shares_charts import _region
from twicetold.report.theme import COLOURS, VERDICTS


def marks(spec):
    """Every mark of a figure, with the layers it stands in."""
    if "mark" in spec:
        mark = spec["mark"]
        yield (mark if isinstance(mark, str) else mark["type"]), spec
    for part in (*spec.get("layer", ()), *spec.get("vconcat", ())):
        yield from marks(part)


@pytest.mark.parametrize("kind", RANKING_KINDS)
def test_every_figure_of_a_catalogue_is_a_valid_chart(rich, kind):
    # altair checks it against the grammar's schema.
    assert isinstance(figure(rich, kind), alt.TopLevelMixin)


@pytest.mark.parametrize("kind", MOTIF_KINDS)
def test_every_figure_of_a_motif_is_a_valid_chart(rich, kind):
    assert isinstance(figure(rich, kind, motif="m008"), alt.TopLevelMixin)


def test_results_give_figures_themselves(rich):
    own = next(e for e in rich.evidence if e.motif_id == "m008")
    wanted = figure(rich, "correlogram", motif="m008").to_dict()
    assert own.figure("correlogram", ranking=rich).to_dict() == wanted
    assert rich.figure("correlogram", motif="m008").to_dict() == wanted
    assert isinstance(own.figure("map", ranking=rich), alt.TopLevelMixin)


@pytest.mark.parametrize(
    ("ending", "start"), [("svg", b"<svg"), ("png", b"\x89PNG"), ("pdf", b"%PDF")]
)
def test_one_specification_gives_every_format(rich, tmp_path, ending, start):
    path = save_figure(figure(rich, "prevalence"), tmp_path / f"prevalence.{ending}", ppi=150)
    assert path.read_bytes().startswith(start)


def test_a_map_as_svg_holds_every_holder_and_the_notice(rich, tmp_path):
    own = next(e for e in rich.evidence if e.motif_id == "m008")
    path = save_figure(figure(rich, "map", motif="m008"), tmp_path / "map.svg")
    text = path.read_text(encoding="utf-8")
    ink = COLOURS["holder"][0]
    drawn = [e for e in own.holders if rich.catalogue.access[e] == "open"]
    assert text.count(f'fill="{ink}"') == len(drawn) + 1  # and the one in the legend
    assert rich.catalogue.notice in text


def test_the_same_results_give_the_same_bytes(rich, tmp_path):
    one = save_figure(figure(rich, "qq"), tmp_path / "a.svg").read_bytes()
    assert one == save_figure(figure(rich, "qq"), tmp_path / "b.svg").read_bytes()


def test_a_wrong_kind_a_wrong_ending_and_missing_results_are_said(rich, bare, tmp_path):
    with pytest.raises(FigureError, match="must be one of map, clusters_against_holders"):
        figure(rich, "pie")
    with pytest.raises(FigureError, match="needs a motif"):
        figure(rich, "correlogram")
    with pytest.raises(FigureError, match=r"must end in one of \.svg"):
        save_figure(figure(rich, "map"), tmp_path / "map.gif")
    with pytest.raises(FigureError, match="prevalence curve was not fitted"):
        figure(bare, "prevalence")
    with pytest.raises(FigureError, match="not computed"):
        figure(bare, "shares", motif="m003")
    with pytest.raises(FigureError, match="give `ranking=`"):
        figure(rich.evidence[7], "map")


def test_every_motif_is_in_the_signature_picture_once(rich):
    points = specification(rich, "clusters_against_holders")["datasets"]["points"]
    shown = listed(rich)
    assert sum(p["n"] for p in points) == len(shown)
    assert {(p["h"], p["c"]) for p in points} == {
        (e.row["holders"], e.row["clusters"]) for e in shown
    }


def test_the_bands_in_the_signature_picture_are_those_of_the_results(rich):
    rows = specification(rich, "clusters_against_holders")["datasets"]["bands"]
    table = rich.bands.set_index(["world", "holders"])
    assert {r["w"] for r in rows} == {"emergence", "contact"}
    for r in rows:
        own = table.loc[(r["w"], r["h"])]
        assert [r["l"], r["m"], r["u"]] == pytest.approx(
            list(own[["low", "median", "high"]]), rel=1e-3
        )


def test_the_bars_of_a_world_hold_its_whole_law_and_split_at_the_observed_value(rich):
    for evidence in rich.evidence:
        for comparison in drawn_comparisons(evidence):
            rows = world_chart(evidence, comparison)["datasets"]["law"]
            law = comparison.law
            assert sum(r["w"] for r in rows) == pytest.approx(1, abs=0.01)
            tail = law.values >= comparison.observed
            if comparison.direction == "few":
                tail = law.values <= comparison.observed
            share = law.weights[tail].sum() / law.total
            assert sum(r["w"] for r in rows if r["t"]) == pytest.approx(share, abs=0.01)


def test_the_map_tells_holders_searched_and_not_searched_apart_by_shape(rich):
    spec = specification(rich, "map", motif="m007")
    shapes = [
        layer["encoding"]["shape"]["scale"]
        for kind, layer in marks(spec)
        if kind == "point" and "shape" in layer["encoding"]
    ]
    for scale in shapes:
        assert scale["domain"] == [
            "attested",
            "searched, not found",
            "not searched",
            "not applicable",
        ]
        # The first two differ by fill, which shows in grey; the others by shape.
        assert len(set(scale["range"])) == 3
    states = {c["i"]: c["s"] for c in spec["datasets"]["cells"]}
    catalogue = rich.catalogue
    index = catalogue.motif_ids.index("m007")
    names = ("not searched", None, "attested", "not applicable")
    for i, state in enumerate(catalogue.states(index)):
        if catalogue.access[i] == "open":
            assert states.get(i) == names[state]


def test_restricted_traditions_and_motifs_are_drawn_nowhere(rich):
    spec = specification(rich, "map", motif="m008")
    assert 5 not in {t["i"] for t in spec["datasets"]["traditions"]}
    name = re.escape(rich.catalogue.tradition_names[5])
    assert not re.search(rf"{name}\b", json.dumps(spec, ensure_ascii=False))
    with pytest.raises(FigureError, match="restricted"):
        figure(rich, "map", motif=rich.catalogue.motif_ids[6])


def test_verdicts_differ_in_shape_and_neighbours_in_the_power_bars_in_grey():
    assert len({v.symbol for v in VERDICTS}) == len(VERDICTS)
    grey = [_luminance(COLOURS[v.colour][0]) for v in VERDICTS]
    assert min(abs(a - b) for a, b in itertools.pairwise(grey)) > 0.1


@pytest.mark.parametrize("side", [0, 1])
def test_text_colours_are_readable_on_their_ground(side):
    # 4.5 to 1 is what WCAG 2.2 asks of text, 3 to 1 of signs that carry meaning (1.4.3, 1.4.11).
    paper = _luminance(COLOURS["paper"][side])
    for name, least in (("ink", 4.5), ("soft", 4.5), ("holder", 4.5), ("tail", 4.5)):
        assert _contrast(_luminance(COLOURS[name][side]), paper) >= least, name


def _luminance(colour):
    parts = np.array([int(colour[k : k + 2], 16) for k in (1, 3, 5)]) / 255
    linear = np.where(parts <= 0.04045, parts / 12.92, ((parts + 0.055) / 1.055) ** 2.4)
    return float(linear @ [0.2126, 0.7152, 0.0722])


def _contrast(a, b):
    return (max(a, b) + 0.05) / (min(a, b) + 0.05)


def test_the_outline_of_the_shares_is_where_every_share_lies_in_its_interval():
    low, high = [0.1, 0.2, 0.0], [0.6, 0.5, 0.4]
    corners = np.array(_region(low, high))
    assert corners.sum(axis=1) == pytest.approx(1)
    assert (corners >= np.array(low) - 1e-9).all()
    assert (corners <= np.array(high) + 1e-9).all()
    # By hand: inheritance is at most .4; contact .2 to .5; emergence at least .1.
    wanted = {(0.5, 0.5, 0.0), (0.6, 0.4, 0.0), (0.6, 0.2, 0.2), (0.4, 0.2, 0.4), (0.1, 0.5, 0.4)}
    assert {tuple(c) for c in corners.round(9).tolist()} == wanted


def test_notebooks_show_results_escaped(rich, bare):
    text = rich._repr_html_()
    assert "<script>alert" not in text
    assert "&lt;script&gt;alert(1)&lt;/script&gt;" in text
    assert "<svg" in text
    assert "<table>" in bare._repr_html_()
    one = rich.evidence[0]._repr_html_()
    assert "&lt;script&gt;" in one
    assert str(one).count("<tr>") == 1 + len(rich.evidence[0].comparisons)
