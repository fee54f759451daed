"""Small things shared by figures and pages: who may be named, how numbers and names are written."""

from __future__ import annotations

import hashlib
import json
import math
import re
import unicodedata
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from twicetold.catalogue import Catalogue
    from twicetold.evidence import MotifEvidence, Ranking

Spec = dict[str, Any]

#: Restricted traditions may be counted only in totals of at least this many.
SMALLEST_TOTAL = 5
_RESERVED = {"con", "prn", "aux", "nul", *(f"{d}{k}" for d in ("com", "lpt") for k in range(10))}
_LONGEST_NAME = 80


def open_traditions(catalogue: Catalogue) -> npt.NDArray[np.bool_]:
    """(N,) bool, True for traditions that may be named and drawn one by one."""
    return np.array([a != "restricted" for a in catalogue.access], dtype=bool)


def listed(ranking: Ranking) -> list[MotifEvidence]:
    """Motifs that may be shown one by one, in ranked order (restricted ones only count)."""
    access = ranking.catalogue.motif_access
    return [e for e in ranking.evidence if access[e.index] != "restricted"]


def is_restricted(catalogue: Catalogue, motif: int) -> bool:
    """Whether this motif may appear in totals only."""
    return catalogue.motif_access[motif] == "restricted"


def title_name(evidence: MotifEvidence) -> str:
    """What the motif is called in titles."""
    return evidence.name or evidence.motif_id


def without_closed_categories(ranking: Ranking) -> Ranking:
    """The ranking without categories that only restricted motifs have: a name may tell a lot."""
    table = ranking.categories
    if (
        table is None
        or "category" not in table
        or "restricted" not in ranking.catalogue.motif_access
    ):
        return ranking
    named = {e.category for e in listed(ranking)}
    return replace(ranking, categories=table[table["category"].isin(named)].reset_index(drop=True))


def page_name(motif_id: str) -> str:
    """File name of a motif's page: readable, safe on every system, one per id.

    Ids made of plain lower-case letters, digits, ``-`` and ``_`` keep their name. Any other gets a
    slug and twelve hexadecimal digits of its SHA-256, so that ids that differ only in case, in
    accents or in signs a file system refuses never meet.
    """
    plain = re.fullmatch(r"[a-z0-9][a-z0-9_-]{0,63}", motif_id) and motif_id not in _RESERVED
    # A plain id that looks like a slug with a digest could meet one: it gets a digest too.
    if plain and not re.search(r"-[0-9a-f]{12}$", motif_id):
        return f"{motif_id}.html"
    folded = unicodedata.normalize("NFKD", motif_id).encode("ascii", "ignore").decode().lower()
    slug = (
        re.sub(r"[^a-z0-9]+", "-", folded).strip("-")[: _LONGEST_NAME - 18].rstrip("-") or "motif"
    )
    digest = hashlib.sha256(motif_id.encode("utf-8", "surrogatepass")).hexdigest()[:12]
    return f"{slug}-{digest}.html"


def to_json(value: Any) -> str:
    """JSON that is safe inside a script element and in a script file."""
    text = json.dumps(value, ensure_ascii=False, allow_nan=False, separators=(",", ":"))
    return (
        text.replace("<", "\\u003c")
        .replace(">", "\\u003e")
        .replace("&", "\\u0026")
        .replace("\u2028", "\\u2028")
        .replace("\u2029", "\\u2029")
    )


def known(value: object) -> bool:
    """Whether a cell holds something (not None, NaN or an empty string)."""
    if value is None or (isinstance(value, str) and not value):
        return False
    return not (isinstance(value, float | np.floating) and math.isnan(value))


def as_float(value: object) -> float:
    """A cell as a float, NaN where it holds nothing or no number."""
    try:
        return float(value) if known(value) else math.nan  # type: ignore[arg-type]
    except (TypeError, ValueError):
        return math.nan


def number(value: object, digits: int = 3) -> str:
    """Write a number for reading: whole numbers whole, others to so many significant digits."""
    x = as_float(value)
    if math.isnan(x):
        return ""
    if math.isinf(x):
        return "∞" if x > 0 else "−∞"
    if abs(x - round(x)) < 1e-9 and abs(x) < 1e12:
        return f"{round(x):,}".replace(",", "\u202f").replace("-", "−")
    if abs(x) >= 10 ** (digits - 1):
        return f"{x:,.{1 if abs(x) < 1000 else 0}f}".replace(",", "\u202f").replace("-", "−")
    return f"{x:.{digits}g}".replace("-", "−")


def probability(value: object) -> str:
    """Write a p-value or a probability: three significant digits, never rounded to nothing."""
    x = as_float(value)
    if math.isnan(x):
        return ""
    if x >= 0.1:
        return f"{x:.3f}".rstrip("0").rstrip(".") or "0"
    if x >= 0.0001:
        return f"{x:.2g}"
    power = math.floor(math.log10(x)) if x > 0 else 0
    return "0" if x <= 0 else f"{x / 10**power:.1f} × 10{_superscript(power)}"


def percent(value: object, digits: int = 0) -> str:
    """Write a share as a percentage; a small share is not rounded to nothing."""
    x = as_float(value)
    if math.isnan(x):
        return ""
    if 0 < x < 0.01 and digits == 0:
        return "under 1\u202f%"
    return f"{100 * x:.{digits}f}\u202f%"


def _superscript(n: int) -> str:
    return str(n).translate(str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"))


def sig(value: object, digits: int = 5) -> float | None:
    """A float with few digits for a figure's data; None where there is none (JSON has no NaN)."""
    x = as_float(value)
    if math.isnan(x) or math.isinf(x):
        return None
    return float(f"{x:.{digits}g}")


def plural(n: int, one: str, many: str | None = None) -> str:
    """``1 holder``, ``3 holders``."""
    return f"{number(n)} {one if n == 1 else many or one + 's'}"


def listing(words: list[str], last: str = "and") -> str:
    """Join words as a sentence does: a, b and c."""
    if len(words) < 2:
        return "".join(words)
    return f"{', '.join(words[:-1])} {last} {words[-1]}"
