"""Tables in, a checked and frozen :class:`Catalogue` out.

Layer rule: imports nothing of twicetold but ``errors`` and ``plan``.
"""

from twicetold.catalogue.model import CellState, Catalogue, SourceFile

__all__ = ["Catalogue", "CellState", "SourceFile"]
