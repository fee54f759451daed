"""The part of the analysis plan that says how a catalogue is read."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

from twicetold.errors import PlanError


@dataclass(frozen=True)
class CatalogueRules:
    """How cells become presence, and which rows enter.

    Parameters
    ----------
    presence : "any" or mapping of str to tuple of str
        CLDF only. ``"any"``: any value that is not null is an attestation, except that plain
        negatives of a yes/no parameter are read as searched and absent. A mapping lists, per
        parameter id, the values, code ids or code names that count as attested; every other value
        that is not null is searched and absent. The key ``*`` stands for all parameters not named;
        without it those follow ``"any"``.
    absent_rows : {"searched", "not searched"}
        What it means that a motif and a tradition have no row.
    restricted : bool
        Whether rows marked ``restricted`` enter. They are dropped otherwise.
    without : tuple of str
        Ids of traditions withdrawn from this analysis.
    effort, family, branch, region : str
        Name of the column of the traditions table that plays this part, when it is not called so.

    Raises
    ------
    PlanError
        When ``absent_rows`` or ``presence`` is none of the above.
    """

    presence: Literal["any"] | Mapping[str, tuple[str, ...]] = "any"
    absent_rows: Literal["searched", "not searched"] = "searched"
    restricted: bool = False
    without: tuple[str, ...] = ()
    effort: str = ""
    family: str = ""
    branch: str = ""
    region: str = ""

    def __post_init__(self) -> None:
        if self.absent_rows not in ("searched", "not searched"):
            raise PlanError(
                "`absent_rows` must be 'searched' or 'not searched', "
                f"got {self.absent_rows!r}. Correct it in the plan."
            )
        if isinstance(self.presence, str) and self.presence != "any":
            raise PlanError(
                "`presence` must be 'any' or a table of parameter = [values], "
                f"got {self.presence!r}. Correct it in the plan."
            )
        if not isinstance(self.presence, str):
            frozen = {str(k): tuple(str(x) for x in v) for k, v in self.presence.items()}
            object.__setattr__(self, "presence", frozen)
        object.__setattr__(self, "without", tuple(self.without))

    def column(self, part: str) -> str:
        """Name of the column asked for by the plan for this part, or an empty string."""
        return {
            "effort": self.effort,
            "family": self.family,
            "branch": self.branch,
            "region": self.region,
        }.get(part, "")
