"""Maps: the traditions and their contact graph, and one motif's holders in it."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from twicetold.report.common import Spec, known, open_traditions, plural, sig
from twicetold.report.geography import View, fit_view, land_features
from twicetold.report.theme import light, titled

if TYPE_CHECKING:
    from twicetold.catalogue import Catalogue
    from twicetold.evidence import MotifEvidence
    from twicetold.graph import ContactGraph
    from twicetold.plan import Plan

WIDTH = 760
#: Places that a seeded script made up need no protection: they are drawn this finely (degrees).
INVENTED_DEGREES = 0.1
#: Places that round to one spot are set on a ring this wide, in parts of the rounding step.
_RING = 0.28
STATES = ("attested", "searched, not found", "not searched", "not applicable")
_MANY = 400
#: A diagonal cross, as Vega has none.
_SALTIRE = "M-1,-1L1,1M-1,1L1,-1"


class Atlas:
    """What every map of a catalogue shares: the view, land, traditions and contact edges.

    Restricted traditions are in none of it.

    Parameters
    ----------
    catalogue : Catalogue
    graph : ContactGraph
    plan : Plan
    """

    def __init__(self, catalogue: Catalogue, graph: ContactGraph, plan: Plan) -> None:
        self.catalogue = catalogue
        self.graph = graph
        self.shown = open_traditions(catalogue)
        step = plan.report.round_degrees
        self.drawn_degrees = min(step, INVENTED_DEGREES) if catalogue.invented else step
        self.lon, self.lat = _drawn(catalogue, self.drawn_degrees)
        self.view: View = fit_view(self.lon[self.shown], self.lat[self.shown])
        self.land = land_features(catalogue.land)
        self.traditions = self._traditions()
        self.edges = self._edges()

    @property
    def datasets(self) -> dict[str, list[dict[str, Any]]]:
        """Named data that every map of the catalogue uses."""
        return {"land": self.land, "edges": self.edges, "traditions": self.traditions}

    def lines(self, chosen: npt.NDArray[np.bool_], kind: str) -> list[dict[str, Any]]:
        """One feature holding the chosen contact edges; each is drawn as a great circle."""
        ends = self.graph.edges[chosen]
        ends = ends[self.shown[ends[:, 0]] & self.shown[ends[:, 1]]]
        if not len(ends):
            return []
        a, b = ends[:, 0], ends[:, 1]
        lines = np.stack([self.lon[a], self.lat[a], self.lon[b], self.lat[b]], axis=1).tolist()
        coordinates = [[[p, q], [r, s]] for p, q, r, s in lines]
        geometry = {"type": "MultiLineString", "coordinates": coordinates}
        return [{"type": "Feature", "properties": {"kind": kind}, "geometry": geometry}]

    def _edges(self) -> list[dict[str, Any]]:
        bridge = self.graph.bridge
        return self.lines(~bridge, "contact") + self.lines(bridge, "bridge")

    def _traditions(self) -> list[dict[str, Any]]:
        c, g = self.catalogue, self.graph
        rows = []
        for i in np.flatnonzero(self.shown).tolist():
            near = [j for j in g.indices[g.indptr[i] : g.indptr[i + 1]].tolist() if self.shown[j]]
            row: dict[str, Any] = {
                "i": i,
                "lon": float(self.lon[i]),
                "lat": float(self.lat[i]),
                "name": c.tradition_names[i] or c.tradition_ids[i],
                "neighbours": _names(c, near),
            }
            if not g.degree[i]:
                row["alone"] = 1
            if c.has_families:
                row["family"] = c.family[i] or "none given"
            if c.effort is not None:
                row["effort"] = sig(c.effort[i], 4)
            rows.append(row)
        return rows

    def hover(self) -> list[dict[str, Any]]:
        """Tooltip fields that the catalogue has something for."""
        out: list[dict[str, Any]] = [{"field": "name", "title": "tradition"}]
        if self.catalogue.has_families:
            out.append({"field": "family", "title": "family"})
        if self.catalogue.effort is not None:
            out.append({"field": "effort", "title": "effort"})
        return [*out, {"field": "neighbours", "title": "neighbours"}]


def catalogue_map(atlas: Atlas) -> Spec:
    """Map of all traditions and the contact graph, bridges dashed."""
    g = atlas.graph
    n = int(atlas.shown.sum())
    alone = int((g.degree == 0).sum())
    parts = [plural(n, "tradition"), plural(g.n_edges, "contact edge") + f" ({g.rule})"]
    if g.bridge.any():
        parts.append(plural(int(g.bridge.sum()), "bridge") + " dashed")
    if alone:
        parts.append(plural(alone, "tradition") + " without neighbours, as open rings")
    layers = _ground(atlas)
    layers.append(
        {
            "data": {"name": "traditions"},
            "mark": {"type": "point", "shape": "circle", "filled": True, "size": _size(n, 34)}
            | {"fill": light("holder"), "opacity": 0.95, "stroke": light("paper")}
            | {"strokeWidth": 0.7, "clip": True},
            "encoding": _place() | {"tooltip": atlas.hover()},
        }
    )
    if alone:
        layers.append(
            {
                "data": {"name": "traditions"},
                "transform": [{"filter": "datum.alone"}],
                "mark": {"type": "point", "shape": "circle", "size": _size(n, 110), "clip": True}
                | {"stroke": light("tail"), "strokeWidth": 1.4, "filled": False},
                "encoding": _place(),
            }
        )
    title = titled("Traditions and their contact graph", ", ".join(parts), atlas.catalogue.notice)
    return _map(atlas, title, layers, {})


def motif_map(atlas: Atlas, evidence: MotifEvidence) -> Spec:
    """Map of one motif: holders, searched and not found, not searched, not applicable; clusters."""
    c = atlas.catalogue
    states = c.states(evidence.index)
    present = [STATES[0], STATES[1]]
    present += [STATES[2]] if (states[atlas.shown] == 0).any() else []
    present += [STATES[3]] if (states[atlas.shown] == 3).any() else []
    holding = np.zeros(c.n_traditions, dtype=bool)
    holding[evidence.holders] = True
    ends = atlas.graph.edges
    joined = holding[ends[:, 0]] & holding[ends[:, 1]]
    joins = atlas.lines(joined, "join")
    n = int(atlas.shown.sum())
    layers = _ground(atlas)
    if joins:
        layers += _outlines(n)
    layers += _points(atlas, present, n)
    clusters = int(evidence.cluster_of.max()) + 1 if len(evidence.cluster_of) else 0
    subtitle = (
        f"{plural(len(evidence.holders), 'holder')} in {plural(clusters, 'cluster')}; "
        "clusters outlined, joins as strong lines"
    )
    title = titled(f"Where {evidence.name or evidence.motif_id} is recorded", subtitle, c.notice)
    own = {"joins": joins, "cells": _cells(atlas, evidence, states, clusters)}
    return _map(atlas, title, layers, own)


def _cells(
    atlas: Atlas, evidence: MotifEvidence, states: npt.NDArray[np.int8], clusters: int
) -> list[dict[str, Any]]:
    """Traditions whose state is not the usual one (searched, not found)."""
    sizes = np.bincount(evidence.cluster_of, minlength=max(clusters, 1))
    rows: list[dict[str, Any]] = []
    for k, i in enumerate(evidence.holders.tolist()):
        if not atlas.shown[i]:
            continue
        number = int(evidence.cluster_of[k])
        rows.append(
            {
                "i": i,
                "s": STATES[0],
                "c": f"{number + 1} of {clusters}, {plural(int(sizes[number]), 'holder')}",
                "j": int(evidence.local_joins[k]),
            }
        )
    for value, name in ((0, STATES[2]), (3, STATES[3])):
        where = np.flatnonzero((states == value) & atlas.shown)
        rows += [{"i": i, "s": name} for i in where.tolist()]
    return rows


def _points(atlas: Atlas, present: list[str], n: int) -> list[Spec]:
    ink, soft, faint, paper = (light(c) for c in ("holder", "soft", "faint", "paper"))
    looks = {
        STATES[0]: ("circle", ink, paper, _size(n, 74)),
        STATES[1]: ("circle", paper, soft, _size(n, 24)),
        STATES[2]: ("cross", faint, paper, _size(n, 62)),
        STATES[3]: (_SALTIRE, soft, soft, _size(n, 34)),
    }

    def scale(k: int) -> dict[str, Any]:
        return {"domain": present, "range": [looks[s][k] for s in present]}

    def channel(k: int) -> dict[str, Any]:
        return {"field": "state", "type": "nominal", "scale": scale(k), "title": None}

    size: Spec = {"value": looks[STATES[1]][3], "condition": []}
    for state in (STATES[0], *present[2:]):
        test = {"test": f"datum.state === '{state}'", "value": looks[state][3]}
        size["condition"].append(test)
    look = {"shape": channel(0), "fill": channel(1), "stroke": channel(2), "size": size}
    find = {"data": {"name": "cells"}, "key": "i", "fields": ["s", "c", "j"]}
    joined = [
        {"lookup": "i", "from": find, "default": None},
        {"calculate": f"datum.s || '{STATES[1]}'", "as": "state"},
    ]
    hover = [*atlas.hover(), {"field": "state", "title": "record"}]
    held = [{"field": "c", "title": "cluster"}, {"field": "j", "title": "joins here"}]
    mark = {"type": "point", "strokeWidth": 1.1, "clip": True, "opacity": 1}
    return [
        {
            "data": {"name": "traditions"},
            "transform": [*joined, {"filter": f"datum.s !== '{STATES[0]}'"}],
            "mark": mark,
            "encoding": _place() | look | {"tooltip": hover},
        },
        {
            "data": {"name": "traditions"},
            "transform": [*joined, {"filter": f"datum.s === '{STATES[0]}'"}],
            "mark": mark,
            "encoding": _place() | look | {"tooltip": [*hover, *held]},
        },
    ]


def _outlines(n: int) -> list[Spec]:
    """Outline clusters: a broad stroke along their joins, a slightly narrower one upon it."""
    broad = 15 if n <= _MANY else 11
    line = {"type": "geoshape", "clip": True, "filled": False, "strokeCap": "round"}
    line |= {"strokeJoin": "round"}
    data = {"data": {"name": "joins"}}
    return [
        data | {"mark": line | {"stroke": light("contact"), "strokeWidth": broad}},
        data | {"mark": line | {"stroke": light("halo"), "strokeWidth": broad - 1.8}},
        data | {"mark": line | {"stroke": light("holder"), "strokeWidth": 1.3}},
    ]


def _ground(atlas: Atlas) -> list[Spec]:
    """Graticule, land and contact edges."""
    step = atlas.view.step
    line = {"type": "geoshape", "clip": True, "filled": False}
    edge = line | {"stroke": light("edge"), "strokeWidth": 0.8}
    layers: list[Spec] = [
        {
            "data": {"graticule": {"step": [step, step]}},
            "mark": line | {"stroke": light("rule"), "strokeWidth": 0.5},
        },
        {
            "data": {"name": "land"},
            "mark": {"type": "geoshape", "clip": True, "fill": light("land")}
            | {"stroke": light("coast"), "strokeWidth": 0.6},
        },
    ]
    if any(f["properties"]["kind"] == "contact" for f in atlas.edges):
        layers.append(_edge_layer("contact", edge))
    if any(f["properties"]["kind"] == "bridge" for f in atlas.edges):
        layers.append(_edge_layer("bridge", edge | {"strokeDash": [4, 3], "strokeWidth": 1}))
    return layers


def _edge_layer(kind: str, mark: dict[str, Any]) -> Spec:
    return {
        "data": {"name": "edges"},
        "transform": [{"filter": f"datum.properties.kind === '{kind}'"}],
        "mark": mark,
    }


def _place() -> dict[str, Any]:
    return {
        "longitude": {"field": "lon", "type": "quantitative"},
        "latitude": {"field": "lat", "type": "quantitative"},
    }


def _map(atlas: Atlas, title: dict[str, Any], layers: list[Spec], own: dict[str, Any]) -> Spec:
    return {
        "title": title,
        "width": WIDTH,
        "height": round(WIDTH * atlas.view.aspect),
        "projection": atlas.view.projection(),
        "view": {"stroke": light("rule")},
        "layer": layers,
        "datasets": atlas.datasets | own,
        "usermeta": {"aspect": atlas.view.aspect},
    }


def _size(n: int, usual: int) -> int:
    """Area of a symbol in square pixels: smaller when there are many."""
    return usual if n <= 150 else round(usual * (0.75 if n <= _MANY else 0.5 if n <= 1500 else 0.3))


def _names(catalogue: Catalogue, who: list[int]) -> str:
    if not who:
        return "none shown"
    names = [catalogue.tradition_names[j] or catalogue.tradition_ids[j] for j in who[:8]]
    more = f" and {len(who) - 8} more" if len(who) > 8 else ""
    return f"{len(who)}: {', '.join(n for n in names if known(n))}{more}"


def _drawn(
    catalogue: Catalogue, step: float
) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.float64]]:
    """Where traditions are drawn: rounded, and set on a ring where several fall on one spot.

    A place on the ring follows from the order of the ids alone, and so tells nothing of the place.
    """
    lon, lat = catalogue.longitude, catalogue.latitude
    if step <= 0:
        return np.round(lon, 4), np.round(lat, 4)
    lon = (np.round(lon / step) * step + 180.0) % 360.0 - 180.0
    lat = np.round(lat / step) * step
    cells = np.rint(lon / step).tolist(), np.rint(lat / step).tolist()
    spots: dict[tuple[float, float], list[int]] = {}
    for i, spot in enumerate(zip(*cells, strict=True)):
        spots.setdefault(spot, []).append(i)
    for here in spots.values():
        if len(here) > 1:
            turn = 2 * np.pi * np.arange(len(here)) / len(here)
            wide = max(float(np.cos(np.radians(lat[here[0]]))), 0.1)
            lon[here] += _RING * step * np.cos(turn) / wide
            lat[here] += _RING * step * np.sin(turn)
    lon = (lon + 180.0) % 360.0 - 180.0
    return np.round(lon, 4), np.clip(np.round(lat, 4), -90.0, 90.0)
