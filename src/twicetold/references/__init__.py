"""Emergence-only and ancestry-only worlds, laws, and the one p-value function.

Layer rule: may import ``graph`` and ``statistics``; knows nothing of catalogues' files or reports.
"""

from twicetold.references.law import Law

__all__ = ["Law"]
