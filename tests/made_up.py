"""Catalogues made up in memory, for tests of the evidence."""

from __future__ import annotations

import numpy as np
import scipy.sparse as sp

from twicetold.catalogue import Catalogue


def catalogue_of(
    rows,
    n,
    *,
    families=0,
    family=None,
    region=None,
    effort=None,
    covariates=None,
    categories=None,
    surveyed=None,
    contacts=None,
    places=None,
    seed=0,
):
    """Give a catalogue of motifs held by the given tradition numbers, places at random."""
    rng = np.random.default_rng(seed)
    if places is None:
        xyz = rng.normal(size=(n, 3))
        xyz /= np.linalg.norm(xyz, axis=1)[:, None]
        places = np.degrees(np.arcsin(xyz[:, 2])), np.degrees(np.arctan2(xyz[:, 1], xyz[:, 0]))
    m = len(rows)
    width = len(str(max(n, m, 100)))
    lengths = [len(r) for r in rows]
    attested = sp.csr_array(
        (
            np.ones(sum(lengths), dtype=bool),
            np.concatenate([np.sort(np.asarray(r, dtype=np.int32)) for r in rows]),
            np.concatenate([[0], np.cumsum(lengths)]),
        ),
        shape=(m, n),
    )
    masks = [np.ones(n, dtype=bool)] * m
    if surveyed is not None:
        masks = [np.isin(np.arange(n), list(s)) for s in surveyed]
    keys = list(dict.fromkeys(mask.tobytes() for mask in masks))
    sets = tuple(np.frombuffer(k, dtype=bool) for k in keys)
    if family is None:
        family = [f"F{k % families:02d}" for k in range(n)] if families else [""] * n
    return Catalogue(
        title="made up",
        notice="Invented for a test.",
        tradition_ids=tuple(f"T{k:0{width}d}" for k in range(n)),
        tradition_names=tuple(f"tradition {k}" for k in range(n)),
        latitude=np.asarray(places[0], dtype=float),
        longitude=np.asarray(places[1], dtype=float),
        family=tuple(family),
        branch=("",) * n,
        region=tuple(region) if region is not None else ("",) * n,
        effort=None if effort is None else np.asarray(effort, dtype=float),
        covariates=covariates or {},
        access=("open",) * n,
        motif_ids=tuple(f"M{k:0{width}d}" for k in range(m)),
        motif_names=tuple(f"motif {k}" for k in range(m)),
        motif_categories=tuple(categories) if categories is not None else ("",) * m,
        motif_access=("open",) * m,
        attested=attested,
        surveyed_sets=sets,
        surveyed_of=np.array([keys.index(mask.tobytes()) for mask in masks], dtype=np.int32),
        not_applicable=sp.csr_array((m, n), dtype=bool),
        contacts=None if contacts is None else np.array(sorted(contacts), dtype=np.int32),
        invented=True,
    )
