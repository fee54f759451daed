"""What a run says in tables and records: CSV and JSON text, with full precision."""

from __future__ import annotations

import hashlib
import json
import math
import platform
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

from twicetold import __version__
from twicetold.folders import write_text

if TYPE_CHECKING:
    import pandas as pd

    from twicetold.evidence import MotifEvidence, Ranking


def evidence_record(ranking: Ranking, evidence: MotifEvidence) -> dict[str, Any]:
    """Give one motif's numbers as plain JSON values."""
    return {
        "twicetold": __version__,
        "catalogue": ranking.catalogue.title,
        "notice": ranking.catalogue.notice,
        **{k: _plain(v) for k, v in evidence.row.items() if k != "rank"},
        "worlds": [
            {
                "world": c.world,
                "statistic": c.statistic,
                "direction": c.direction,
                "observed": _plain(c.observed),
                "expected": _plain(c.expected),
                "p": _plain(c.p),
                "p_attainable": _plain(c.p_attainable),
                "primary": c.primary,
                "exact": bool(c.law is not None and c.law.exact),
                "note": c.note,
            }
            for c in evidence.comparisons
        ],
        "hidden_bound_detail": {k: _plain(v) for k, v in evidence.hidden_bound.items()},
        "fits": {k: _plain(v) for k, v in ranking.fits.items()},
        "notes": list(ranking.notes),
        "plan": ranking.plan.to_mapping(),
    }


def run_tables(ranking: Ranking) -> dict[str, pd.DataFrame]:
    """Give every table of a run but that of the motifs, by name."""
    tables = dict(ranking.tables)
    for name in ("bands", "prevalence", "categories"):
        frame = getattr(ranking, name)
        if frame is not None:
            tables[name] = frame
    stability = [
        e.stability.assign(motif_id=e.motif_id) for e in ranking.evidence if e.stability is not None
    ]
    if stability:
        import pandas as pd

        together = pd.concat(stability, ignore_index=True)
        first = ["motif_id", *[c for c in together.columns if c != "motif_id"]]
        tables["stability"] = together[first]
    return tables


def contacts_frame(ranking: Ranking) -> pd.DataFrame:
    """Give the contact graph as a table: one row an edge."""
    import pandas as pd

    graph, ids = ranking.graph, ranking.catalogue.tradition_ids
    return pd.DataFrame(
        {
            "tradition_id": [ids[i] for i in graph.edges[:, 0]],
            "neighbour_id": [ids[i] for i in graph.edges[:, 1]],
            "length_km": graph.length_km.round(3),
            "bridge": ["yes" if b else "no" for b in graph.bridge],
        }
    )


def run_record(ranking: Ranking, *, by: str) -> dict[str, Any]:
    """Everything needed to make the run again: plan, seed, versions, inputs by SHA-256."""
    catalogue = ranking.catalogue
    return {
        "twicetold": __version__,
        "plan": ranking.plan.to_mapping(),
        "plan_sha256": ranking.plan.digest(),
        "by": by,
        "seed": ranking.plan.evidence.seed,
        "catalogue": {
            "title": catalogue.title,
            "notice": catalogue.notice,
            "traditions": catalogue.n_traditions,
            "motifs": catalogue.n_motifs,
            "attestations": int(catalogue.attested.nnz),
            "without_coordinates": len(catalogue.unlocated),
            "withheld_traditions": catalogue.withheld_traditions,
            "withheld_motifs": catalogue.withheld_motifs,
            "inputs": [
                {"name": s.name, "bytes": s.size, "sha256": s.sha256} for s in catalogue.sources
            ],
        },
        "graph": _plain_mapping(ranking.fits.get("graph", {})),
        "fits": {k: _plain(v) for k, v in ranking.fits.items() if k != "graph"},
        "verdicts": {
            str(k): int(v) for k, v in ranking.motifs["verdict"].value_counts().sort_index().items()
        },
        "notes": list(ranking.notes),
        "versions": versions(),
        "motifs_sha256": hashlib.sha256(csv_text(ranking.motifs).encode()).hexdigest(),
    }


def versions() -> dict[str, str]:
    """Versions of Python and of the packages that make numbers."""
    from importlib.metadata import version

    names = ("numpy", "scipy", "pandas", "statsmodels", "libpysal", "esda", "numba", "scikit-learn")
    return {"python": platform.python_version(), **{name: version(name) for name in names}}


def csv_text(frame: Any) -> str:
    """Write a table as CSV text: full precision, blanks for what is not there, line feeds."""
    text: str = frame.to_csv(index=False, lineterminator="\n", na_rep="", float_format="%.12g")
    return text


def write_csv(frame: Any, path: Path) -> None:
    """Write a table as UTF-8 CSV."""
    write_text(path, csv_text(frame))


def json_text(record: Mapping[str, Any]) -> str:
    return json.dumps(record, ensure_ascii=False, indent=2, allow_nan=False) + "\n"


def _plain_mapping(value: Any) -> dict[str, Any]:
    return {str(k): _plain(v) for k, v in dict(value).items()}


def _plain(value: Any) -> Any:
    """Turn NumPy values and NaN into what JSON can hold."""
    if isinstance(value, Mapping):
        return _plain_mapping(value)
    if isinstance(value, list | tuple):
        return [_plain(v) for v in value]
    if hasattr(value, "tolist"):
        return _plain(value.tolist())
    if isinstance(value, float):
        return float(f"{value:.12g}") if math.isfinite(value) else None
    return value
