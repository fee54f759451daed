"""One specification per figure, for the screen, the page and the printed file alike."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

from twicetold.errors import TwicetoldError
from twicetold.report import category_charts, maps, motif_charts, overview_charts, shares_charts
from twicetold.report.common import Spec, is_restricted, without_closed_categories
from twicetold.report.steady import steady_pdf, steady_svg
from twicetold.report.theme import config

if TYPE_CHECKING:
    import altair as alt

    from twicetold.evidence import MotifEvidence, Ranking

RANKING_KINDS = ("map", "clusters_against_holders", "prevalence", "qq", "categories", "ratios")
MOTIF_KINDS = ("map", "worlds", "correlogram", "shares", "stability", "power")
FORMATS = ("svg", "png", "pdf", "html", "json")


class FigureError(TwicetoldError):
    """A figure was asked for that does not exist, or that these results cannot give."""


def figure(
    result: Ranking | MotifEvidence,
    kind: str,
    *,
    motif: str | None = None,
    ranking: Ranking | None = None,
) -> alt.TopLevelMixin:
    """Give a figure of a catalogue or of a motif as an altair chart.

    Parameters
    ----------
    result : Ranking or MotifEvidence
    kind : str
        Of a catalogue: ``map``, ``clusters_against_holders``, ``prevalence``, ``qq``,
        ``categories``, ``ratios``. Of a motif: ``map``, ``worlds``, ``correlogram``, ``shares``,
        ``stability``, ``power``.
    motif : str, optional
        With a ranking: the id or name of the motif to draw.
    ranking : Ranking, optional
        With a motif's evidence: the ranking it belongs to. Needed for its map.

    Returns
    -------
    altair chart
        Save it with :func:`save_figure`, or show it in a notebook.

    Raises
    ------
    FigureError
        When there is no such figure or the results lack what it shows.
    """
    import altair as alt

    return alt.Chart.from_dict(specification(result, kind, motif=motif, ranking=ranking))


def specification(
    result: Ranking | MotifEvidence,
    kind: str,
    *,
    motif: str | None = None,
    ranking: Ranking | None = None,
) -> Spec:
    """Give the Vega-Lite specification behind :func:`figure` as plain dictionaries."""
    from twicetold.evidence.results import Ranking

    if isinstance(result, Ranking):
        alone = len(result.evidence) == 1 and kind in MOTIF_KINDS
        if motif is None and alone:
            motif = result.evidence[0].motif_id
        if motif is None:
            spec = _of_ranking(without_closed_categories(result), kind)
        else:
            index = result.catalogue.find_motif(motif)
            found = [e for e in result.evidence if e.index == index]
            if not found:
                raise FigureError(f"The motif {motif!r} is not among these results.")
            spec = _of_motif(found[0], kind, result)
    else:
        spec = _of_motif(result, kind, ranking)
    return {**spec, "config": config()}


def _of_ranking(ranking: Ranking, kind: str) -> Spec:
    if kind == "map":
        return maps.catalogue_map(maps.Atlas(ranking.catalogue, ranking.graph, ranking.plan))
    if kind == "clusters_against_holders":
        return overview_charts.signature_chart(ranking)
    if kind == "prevalence":
        _need(ranking.prevalence is not None, kind, "the prevalence curve was not fitted")
        return overview_charts.prevalence_chart(ranking)
    if kind == "qq":
        _need(overview_charts.has_quantiles(ranking), kind, "no world gave p-values")
        return overview_charts.qq_chart(ranking)
    if kind in ("categories", "ratios"):
        given = ranking.categories is not None and len(ranking.categories) > 0
        _need(given, kind, "the catalogue names no categories")
        draw = {
            "categories": category_charts.categories_chart,
            "ratios": category_charts.ratio_chart,
        }
        return draw[kind](ranking)
    raise FigureError(_unknown(kind, RANKING_KINDS, "catalogue", MOTIF_KINDS))


def _of_motif(evidence: MotifEvidence, kind: str, ranking: Ranking | None) -> Spec:
    notice = ranking.catalogue.notice if ranking is not None else ""
    if kind == "map":
        if ranking is None:
            raise FigureError(
                "The map of a motif needs the traditions: give `ranking=`, or ask the ranking for "
                'figure("map", motif=...).'
            )
        if is_restricted(ranking.catalogue, evidence.index):
            raise FigureError("This motif is restricted and appears in totals only.")
        atlas = maps.Atlas(ranking.catalogue, ranking.graph, ranking.plan)
        return maps.motif_map(atlas, evidence)
    if kind == "worlds":
        _need(bool(motif_charts.drawn_comparisons(evidence)), kind, "no world was drawn for it")
        return motif_charts.worlds_chart(evidence, notice)
    draw = {
        "correlogram": (motif_charts.correlogram_chart, evidence.correlogram),
        "shares": (
            shares_charts.shares_chart,
            None if evidence.shares is None or evidence.shares.refused else evidence.shares,
        ),
        "stability": (motif_charts.stability_chart, evidence.stability),
        "power": (motif_charts.power_chart, evidence.power),
    }
    if kind not in draw:
        raise FigureError(_unknown(kind, MOTIF_KINDS, "motif", RANKING_KINDS))
    chart, needed = draw[kind]
    _need(needed is not None, kind, "it was not computed for this motif")
    return chart(evidence, notice)


def _need(given: bool, kind: str, why: str) -> None:
    if not given:
        raise FigureError(f"There is nothing to draw for {kind!r}: {why}.")


def _unknown(kind: str, known: tuple[str, ...], what: str, others: tuple[str, ...]) -> str:
    hint = " That one needs a motif." if kind in others and what == "catalogue" else ""
    return f"`kind` of a {what}'s figure must be one of {', '.join(known)}; got {kind!r}.{hint}"


def save_figure(chart: alt.TopLevelMixin | Spec, path: str | Path, *, ppi: int = 300) -> Path:
    """Write a figure as SVG, PNG, PDF, HTML (works with no network) or its JSON specification.

    Parameters
    ----------
    chart : altair chart or dict
        From :func:`figure`, or a Vega-Lite specification.
    path : str or Path
        The ending says the format.
    ppi : int
        Dots per inch of a PNG.

    Raises
    ------
    FigureError
        When the ending is none of the formats.
    """
    path = Path(path)
    kind = path.suffix.lstrip(".").lower()
    if kind not in FORMATS:
        raise FigureError(
            f"`path` must end in one of {', '.join('.' + f for f in FORMATS)}; got {path.name!r}."
        )
    path.write_bytes(render(chart, kind, ppi=ppi))
    return path


def render(chart: alt.TopLevelMixin | Spec, kind: str, *, ppi: int = 300) -> bytes:
    """Give a figure in one of the formats as bytes."""
    spec: Spec = chart if isinstance(chart, dict) else json.loads(chart.to_json())
    if kind == "json":
        return json.dumps(spec, ensure_ascii=False, indent=1, sort_keys=True).encode()
    import vl_convert

    options: dict[str, Any] = {"vl_version": _grammar()}
    if kind == "svg":
        return steady_svg(str(vl_convert.vegalite_to_svg(spec, **options))).encode()
    if kind == "png":
        return bytes(vl_convert.vegalite_to_png(spec, ppi=ppi, **options))
    if kind == "pdf":
        return steady_pdf(bytes(vl_convert.vegalite_to_pdf(spec, **options)))
    options["renderer"] = "svg"
    return str(vl_convert.vegalite_to_html(spec, bundle=True, **options)).encode()


def _grammar() -> str:
    """Version of Vega-Lite to compile with: the newest that the converter carries."""
    import vl_convert

    return str(vl_convert.get_vegalite_versions()[-1])
