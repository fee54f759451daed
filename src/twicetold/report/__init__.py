"""Figures, pages, tables, supplement. Recomputes nothing.

Layer rule: reads results only; no statistic or p-value is computed here.
"""
