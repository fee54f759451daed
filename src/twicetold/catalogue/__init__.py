"""Tables in, a checked and frozen :class:`Catalogue` out.

Layer rule: imports nothing of twicetold but ``errors``; the plan takes :class:`CatalogueRules`
from here.
"""

from twicetold.catalogue.model import Catalogue, CellState, SourceFile
from twicetold.catalogue.read import check_catalogue, read_catalogue
from twicetold.catalogue.rules import CatalogueRules
from twicetold.catalogue.write import write_catalogue

__all__ = [
    "Catalogue",
    "CatalogueRules",
    "CellState",
    "SourceFile",
    "check_catalogue",
    "read_catalogue",
    "write_catalogue",
]
