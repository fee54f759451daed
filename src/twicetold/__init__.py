"""twicetold: was the tale carried, or told twice?

For every motif of a catalogue: does its geography favour contact spread, parallel emergence or
shared ancestry, or can the records not tell? The names below are loaded on first use, so that
``import twicetold`` stays light.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

from twicetold._compiled import keep_kernels_somewhere

__version__ = "0.1.0"

_HOMES = {
    "Catalogue": "twicetold.catalogue",
    "CatalogueError": "twicetold.errors",
    "ContactGraph": "twicetold.graph",
    "Plan": "twicetold.plan",
    "PlanError": "twicetold.errors",
    "TwicetoldError": "twicetold.errors",
    "contact_graph": "twicetold.graph",
    "rank_catalogue": "twicetold.evidence",
    "read_catalogue": "twicetold.catalogue",
    "read_plan": "twicetold.plan",
    "test_motif": "twicetold.evidence",
}
__all__ = [
    "Catalogue",
    "CatalogueError",
    "ContactGraph",
    "Plan",
    "PlanError",
    "TwicetoldError",
    "__version__",
    "contact_graph",
    "rank_catalogue",
    "read_catalogue",
    "read_plan",
    "test_motif",
]

if TYPE_CHECKING:
    from twicetold.catalogue import Catalogue, read_catalogue
    from twicetold.errors import CatalogueError, PlanError, TwicetoldError
    from twicetold.evidence import rank_catalogue, test_motif
    from twicetold.graph import ContactGraph, contact_graph
    from twicetold.plan import Plan, read_plan


keep_kernels_somewhere()


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        return getattr(importlib.import_module(_HOMES[name]), name)
    raise AttributeError(f"module 'twicetold' has no attribute {name!r}")


def __dir__() -> list[str]:
    return __all__
