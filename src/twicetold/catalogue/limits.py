"""How large a catalogue's files may be; beyond these the reader refuses before it allocates.

The figures leave room for 100,000 motifs over 10,000 traditions on a machine with 16 GB, and are
common practice, not from a source.
"""

from __future__ import annotations

from typing import Final

MEBIBYTE: Final = 1024 * 1024

TABLE_BYTES: Final = 4096 * MEBIBYTE
"""Largest text table, in bytes (after unpacking, when zipped)."""
TABLE_ROWS: Final = 50_000_000
"""Most rows in one table."""
TABLE_COLUMNS: Final = 200_000
"""Most columns in one table (a wide matrix needs one per tradition)."""
MATRIX_CELLS: Final = 200_000_000
"""Most cells in a wide matrix; larger ones belong in an attestations table."""
LINE_BYTES: Final = 32 * MEBIBYTE
"""Longest line of a text table."""
CELL_CHARS: Final = 32_767
"""Longest cell that is kept (also the longest a spreadsheet can hold)."""
ID_CHARS: Final = 200
"""Longest id."""
SURVEYED_BYTES: Final = 2048 * MEBIBYTE
"""Most memory for the distinct sets of traditions searched."""

WORKBOOK_BYTES: Final = 256 * MEBIBYTE
"""Largest workbook as it lies on disk."""
WORKBOOK_UNPACKED: Final = 1024 * MEBIBYTE
"""Largest sum of a workbook's parts after unpacking."""
WORKBOOK_RATIO: Final = 400
"""Largest unpacked-to-packed ratio of one part over ``WORKBOOK_RATIO_FROM`` bytes."""
WORKBOOK_RATIO_FROM: Final = 16 * MEBIBYTE
"""Parts smaller than this, unpacked, are not judged by ratio."""
WORKBOOK_PARTS: Final = 2_000
"""Most files inside a workbook."""
SHEET_ROWS: Final = 1_048_576
"""Most rows of a sheet, as the format allows."""
SHEET_CELLS: Final = 100_000_000
"""Most cells visited in one sheet, blanks between filled cells included."""

METADATA_BYTES: Final = 32 * MEBIBYTE
"""Largest CLDF metadata file."""
ABOUT_BYTES: Final = MEBIBYTE
"""Largest ``about.toml``."""
LAND_BYTES: Final = 64 * MEBIBYTE
"""Largest ``land.geojson``."""

CHUNK_ROWS: Final = 8_192
"""Rows held as text at a time."""
PROBLEMS_SHOWN: Final = 20
"""Problems of one kind in one file that are printed; the rest are counted."""
