"""Results as a notebook shows them: a short table and a picture, complete in themselves."""

from __future__ import annotations

from markupsafe import Markup, escape

from twicetold.evidence.results import MotifEvidence, Ranking
from twicetold.report import tables, words
from twicetold.report.common import is_restricted, number, title_name
from twicetold.report.figures import figure, render, specification
from twicetold.report.theme import light

__all__ = ["as_html", "figure"]

_FIRST_ROWS = 10
_CELL = 'style="text-align:{0};padding:.15em .9em .15em 0"'


def as_html(result: object) -> str:
    """Give a ranking or a motif's evidence as HTML; everything from the catalogue is escaped."""
    if isinstance(result, Ranking):
        parts = _one(result) if len(result.evidence) == 1 else _many(result)
        notice = result.catalogue.notice
    elif isinstance(result, MotifEvidence):
        parts, notice = _motif(result), ""
    else:
        raise TypeError(f"`result` must be a Ranking or a MotifEvidence, got {type(result)}.")
    if notice:
        parts.insert(0, _line(notice, f"border-left:4px solid {light('tail')};padding-left:.6em"))
    return str(Markup('<div class="twicetold">{}</div>').format(Markup("").join(parts)))


def _many(ranking: Ranking) -> list[Markup]:
    shown = tables.first_rows(ranking, _FIRST_ROWS)
    rest = len(ranking.motifs) - len(shown.rows)
    picture = render(specification(ranking, "clusters_against_holders"), "svg").decode()
    parts = [
        Markup("<h3 dir='auto'>{}</h3>").format(ranking.catalogue.title or "Catalogue"),
        _line(words.catalogue_sentence(ranking)),
        *[_line(note) for note in ranking.notes],
        _picture(picture),
        _table(shown),
    ]
    return [*parts, _line(f"And {number(rest)} more; to_frame() gives all.")] if rest > 0 else parts


def _one(ranking: Ranking) -> list[Markup]:
    evidence = ranking.evidence[0]
    parts = _motif(evidence)
    if not is_restricted(ranking.catalogue, evidence.index):
        spec = specification(ranking, "map", motif=evidence.motif_id)
        parts.insert(1, _picture(render(spec, "svg").decode()))
    return parts


def _motif(evidence: MotifEvidence) -> list[Markup]:
    verdict = str(evidence.row.get("verdict", ""))
    families = any(c.world == "ancestry" for c in evidence.comparisons)
    said = [words.reason_sentence(evidence), words.shares_sentence(evidence)]
    said += [words.stability_sentence(evidence), words.hidden_sentence(evidence)]
    head = Markup("<h3 dir='auto'>{}</h3><p><b>{}</b>. {}</p>").format(
        title_name(evidence), verdict, words.verdict_sentence(evidence, families=families)
    )
    sheet = tables.comparison_sheet(evidence)
    return [head, *[_line(s) for s in said if s], _table(sheet)]


def _picture(svg: str) -> Markup:
    return Markup('<div style="max-width:100%;overflow-x:auto">{}</div>').format(Markup(svg))


def _line(text: str, style: str = "") -> Markup:
    return Markup("<p dir='auto' style='{}'>{}</p>").format(style, text)


def _table(sheet: tables.Sheet) -> Markup:
    def row(cells: tuple[str, ...], tag: str) -> Markup:
        out = Markup("")
        for k, cell in enumerate(cells):
            side = _CELL.format("right" if k in sheet.numeric else "left")
            out += Markup(f"<{tag} {side} dir='auto'>") + escape(cell) + Markup(f"</{tag}>")
        return Markup("<tr>{}</tr>").format(out)

    body = Markup("").join(row(cells, "td") for cells in sheet.rows)
    return Markup("<table><thead>{}</thead><tbody>{}</tbody></table>").format(
        row(sheet.heads, "th"), body
    )
