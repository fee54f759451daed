"""Rows of a small table as plain mappings: many thousands of tables are read for one run."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import pandas as pd


def records(table: pd.DataFrame) -> list[dict[Any, Any]]:
    """Give each row as column to plain value; several times as quick as pandas does."""
    columns = [table[name].tolist() for name in table.columns]
    return [dict(zip(table.columns, row, strict=True)) for row in zip(*columns, strict=True)]
