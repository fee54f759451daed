"""Pages of a run: one for the catalogue, one for each motif; they work from disk, with no network.

What pages share (drawing library, style, land, traditions, contact edges) lies once in ``assets``.
"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

from markupsafe import Markup

from twicetold import __version__
from twicetold.report import maps, tables, words
from twicetold.report.common import (
    Spec,
    listed,
    number,
    page_name,
    to_json,
    without_closed_categories,
)
from twicetold.report.methods import Methods, methods
from twicetold.report.motif_page import motif_context
from twicetold.report.run_page import run_context
from twicetold.report.shelf import asset, drawing_library, script, style, templates, write
from twicetold.report.theme import COLOURS, config

if TYPE_CHECKING:
    from twicetold.evidence import MotifEvidence, Ranking

#: Data that lie once in ``assets`` for all pages.
SHARED = ("land", "edges", "traditions")


def write_pages(ranking: Ranking, folder: Path, *, command: Mapping[str, str]) -> None:
    """Write the pages of a run into ``folder`` (which must exist).

    Parameters
    ----------
    ranking : Ranking
        Of a catalogue, or of one motif (as a test gives): then only that motif's page is written,
        as ``index.html`` too.
    folder : Path
    command : mapping of str to str
        ``rank`` or ``test``: the command that made the results. ``catalogue``: its name.
    """
    press = Press(ranking, folder, command)
    press.assets()
    if "rank" in command or len(ranking.evidence) != 1:
        press.run_page()
        press.methods_files()
        for evidence in listed(ranking):
            press.motif_page(evidence)
    else:
        press.single_page()
        press.methods_files()


def write_motif_page(
    ranking: Ranking, evidence: MotifEvidence, folder: Path, *, command: Mapping[str, str]
) -> Path:
    """Write one motif's page (and the shared assets, where they are missing); give its path."""
    press = Press(ranking, folder, command)
    if not (folder / "assets" / "shared.js").exists():
        press.assets()
    return press.motif_page(evidence)


class Press:
    """Writes the pages of one ranking.

    Parameters
    ----------
    ranking : Ranking
    folder : Path
    command : mapping of str to str
        See :func:`write_pages`.
    """

    def __init__(self, ranking: Ranking, folder: Path, command: Mapping[str, str]) -> None:
        self.ranking = ranking = without_closed_categories(ranking)
        self.folder = Path(folder)
        self.command = dict(command)
        self.atlas = maps.Atlas(ranking.catalogue, ranking.graph, ranking.plan)
        self.shown = listed(ranking)
        self.pages = {e.motif_id: page_name(e.motif_id) for e in self.shown}
        self.place = {e.motif_id: k for k, e in enumerate(self.shown)}
        self.families = ranking.catalogue.has_families and ranking.plan.ancestry.level != "none"
        self.methods: Methods = methods(ranking)
        self.digest = ranking.plan.digest()[:12]

    def assets(self) -> None:
        """Write what all pages share."""
        out = self.folder / "assets"
        out.mkdir(parents=True, exist_ok=True)
        colours = {pair[0]: name for name, pair in COLOURS.items()}
        shared = {"config": config(), "datasets": self.atlas.datasets, "colours": colours}
        files = {
            "page.css": style(),
            "page.js": asset("page.js"),
            "table.js": asset("table.js"),
            "vega.js": drawing_library(),
            "shared.js": script("shared", shared),
            "LAND.txt": asset("LAND.txt"),
        }
        for name, text in files.items():
            write(out / name, text)

    def methods_files(self) -> None:
        """Write the methods paragraph, its references and the plan beside the pages."""
        write(self.folder / "methods.md", self.methods.markdown())
        write(self.folder / "references.bib", self.methods.bibtex())
        plan = self.folder / "plan.toml"
        if not plan.exists():
            write(plan, self.ranking.plan.to_toml())

    def run_page(self) -> None:
        """Write the page of the whole catalogue and the data of its table."""
        data = tables.motif_table(self.ranking)
        write(self.folder / "assets" / "motifs.js", script("motifs", data))
        write(
            self.folder / "index.html",
            templates()
            .get_template("index.html.j2")
            .render(**self._common(root="", has_index=True), **run_context(self)),
        )

    def motif_page(self, evidence: MotifEvidence) -> Path:
        """Write one motif's page."""
        out = self.folder / "motifs"
        out.mkdir(exist_ok=True)
        path = out / self.pages[evidence.motif_id]
        template = templates().get_template("motif.html.j2")
        common = self._common(root="../", has_index=True)
        write(path, template.render(**common, **motif_context(self, evidence)))
        return path

    def single_page(self) -> None:
        """Write the page of the only motif as the folder's front page."""
        template = templates().get_template("motif.html.j2")
        common = self._common(root="", has_index=False)
        for evidence in self.shown:
            text = template.render(**common, **motif_context(self, evidence))
            write(self.folder / "index.html", text)

    def figure(self, kind: str, spec: Spec, label: str = "") -> dict[str, Any]:
        """Make a specification ready for a page: what is shared is named, not repeated."""
        title = spec.get("title", {})
        own = dict(spec)
        datasets = dict(own.pop("datasets", {}))
        shared = [name for name in SHARED if datasets.pop(name, None) is not None]
        own["datasets"] = datasets
        own["usermeta"] = dict(own.get("usermeta", {})) | ({"shared": shared} if shared else {})
        notice = self.ranking.catalogue.notice
        return {
            "id": f"figure-{kind}",
            "title": title.get("text", kind),
            # The page shows the notice once, at its head; a saved figure has it again.
            "subtitle": [line for line in title.get("subtitle", []) if line != notice],
            "label": label,
            "json": Markup(to_json(own)),
        }

    def labels(self, who: set[int] | None = None) -> list[tuple[str, str]]:
        """Community-made labels and notices, as (tradition, text), verbatim."""
        c = self.ranking.catalogue
        place = {t: i for i, t in enumerate(c.tradition_ids)}
        out = []
        for tradition, texts in c.labels.items():
            i = place.get(tradition)
            if i is None or not self.atlas.shown[i] or (who is not None and i not in who):
                continue
            out += [(c.tradition_names[i] or tradition, text) for text in texts]
        return out

    def _common(self, *, root: str, has_index: bool) -> dict[str, Any]:
        c, plan = self.ranking.catalogue, self.ranking.plan
        step = self.atlas.drawn_degrees
        drawn = f"Places are drawn to the nearest {number(step)}°." if step > 0 else ""
        return {
            "root": root,
            "has_index": has_index,
            "version": __version__,
            "notice": c.notice,
            "catalogue": c.title or self.command.get("catalogue", "Catalogue"),
            "seed": plan.evidence.seed,
            "digest": self.digest,
            "drawn": drawn,
            "caution_list": words.CAUTIONS,
        }
