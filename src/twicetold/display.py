"""How results show themselves in a notebook: the name of what draws them, loaded on first use.

The records of ``twicetold.evidence`` stand below the pages and figures and may not know them. They
ask here, and here is only a name.
"""

from __future__ import annotations

import importlib
from typing import Any

_DRAWN_BY = "twicetold.report.notebook"


def as_html(result: object) -> str:
    """Give a result as HTML for a notebook."""
    return str(importlib.import_module(_DRAWN_BY).as_html(result))


def as_figure(result: object, kind: str, **options: Any) -> Any:
    """Give a figure of a result as an altair chart."""
    return importlib.import_module(_DRAWN_BY).figure(result, kind, **options)
