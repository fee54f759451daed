"""The rule of a contact graph, as written in the plan."""

from __future__ import annotations

import math
from dataclasses import dataclass

from twicetold.catalogue.notes import shown
from twicetold.errors import GraphError

_ALL = "nearest:K, within:KM, delaunay, gabriel, given or given:FILE"


@dataclass(frozen=True)
class Rule:
    """A contact-graph rule, taken apart.

    Parameters
    ----------
    kind : str
        ``nearest``, ``within``, ``delaunay``, ``gabriel`` or ``given``.
    k : int
        Neighbours each (1 to 40), for ``nearest``.
    km : float
        Greatest length in kilometres, for ``within``.
    file : str
        GAL or GWT file, for ``given``; empty for the catalogue's own contacts table.
    """

    kind: str
    k: int = 0
    km: float = 0.0
    file: str = ""

    def __str__(self) -> str:
        if self.kind == "nearest":
            return f"nearest:{self.k}"
        if self.kind == "within":
            return f"within:{self.km:.12g}"
        if self.file:
            # The name alone: where a file lies on one machine is nobody else's business.
            return f"given:{self.file.replace(chr(92), '/').rsplit('/', 1)[-1]}"
        return self.kind


def parse_rule(rule: str, *, key: str = "graph.rule") -> Rule:
    """Read a rule such as ``nearest:6`` or ``within:500``.

    Parameters
    ----------
    rule : str
    key : str
        Key of the plan that holds it, for the message.

    Raises
    ------
    GraphError
        When the rule is unknown or its number is out of range.
    """
    kind, colon, value = rule.strip().partition(":")
    value = value.strip()
    if kind == "nearest":
        digits = value.isascii() and value.isdigit() and len(value) <= 9
        if not (digits and 1 <= int(value) <= 40):
            raise GraphError(
                f"`{key}` must be nearest:K with K a whole number from 1 to 40 "
                f"(for instance nearest:6), got {shown(rule)}."
            )
        return Rule("nearest", k=int(value))
    if kind == "within":
        try:
            km = float(value)
        except ValueError:
            km = math.nan
        if not (math.isfinite(km) and km > 0):
            raise GraphError(
                f"`{key}` must be within:KM with KM a number of kilometres above 0 "
                f"(for instance within:500), got {shown(rule)}."
            )
        return Rule("within", km=km)
    if kind == "given" and not (colon and not value):
        return Rule("given", file=value)
    if kind in ("delaunay", "gabriel") and not colon:
        return Rule(kind)
    raise GraphError(f"`{key}` must be one of {_ALL}; got {shown(rule)}.")
