"""Figures, pages, tables, supplement. Recomputes nothing.

Layer rule: reads results only; no statistic or p-value is computed here.
"""

from __future__ import annotations

from twicetold.report.common import page_name
from twicetold.report.figures import FigureError, figure, save_figure
from twicetold.report.pages import write_motif_page, write_pages
from twicetold.report.power_page import write_power

__all__ = [
    "FigureError",
    "figure",
    "page_name",
    "save_figure",
    "write_motif_page",
    "write_pages",
    "write_power",
]
