"""The sections of the analysis plan: each key with its explanation, default and range.

Used by ``plan`` only, which puts them together and reads and writes them.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from twicetold._plan_values import between, one_of, shown, zero_or_between
from twicetold.errors import PlanError

WORLDS = ("emergence", "ancestry", "contact", "transmission", "shares")
PROPENSITIES = ("equal", "effort", "recorded", "covariates", "margins")
LEVELS = ("family", "branch", "none")
COLUMNS = ("effort", "family", "branch", "region")
GRAPH_RULES = ("nearest:K", "within:KM", "delaunay", "gabriel", "given", "given:FILE")


def _say(explanation: str, default: Any) -> Any:
    """Declare a field of a plan section with the sentence that explains it."""
    if isinstance(default, Mapping | list):
        return field(default_factory=lambda: default, metadata={"explain": explanation})
    return field(default=default, metadata={"explain": explanation})


@dataclass(frozen=True)
class CatalogueSection:
    """How the tables are read."""

    presence: str | Mapping[str, tuple[str, ...]] = _say(
        'What counts as a record in CLDF: "any" non-empty value, or a table of '
        "parameter = [values or code ids].",
        "any",
    )
    absent_rows: str = _say(
        'What no row means: "searched" (searched and absent) or "not searched".', "searched"
    )
    effort: str = _say("Name of the traditions' column of effort.", "effort")
    family: str = _say("Name of the traditions' column of families.", "family")
    branch: str = _say("Name of the traditions' column of branches.", "branch")
    region: str = _say("Name of the traditions' column of regions.", "region")
    restricted: bool = _say(
        "Whether rows marked restricted enter; they then appear only in totals.", False
    )
    without: tuple[str, ...] = _say("Ids of traditions withdrawn from the analysis.", ())

    def check(self) -> None:
        """Refuse values that cannot be used."""
        one_of("catalogue.absent_rows", self.absent_rows, ("searched", "not searched"))
        if isinstance(self.presence, str):
            one_of("catalogue.presence", self.presence, ("any",), " or a table")
        for part in COLUMNS:
            if not getattr(self, part).strip():
                raise PlanError(f"`catalogue.{part}` must name a column, got an empty text.")


@dataclass(frozen=True)
class GraphSection:
    """Who could have heard it from whom."""

    rule: str = _say(f"Contact graph: one of {', '.join(GRAPH_RULES)}.", "nearest:6")
    bridges: bool = _say(
        "Whether separate pieces are joined by edges of the minimum spanning tree, so that contact "
        "is never impossible by construction.",
        True,
    )

    def check(self) -> None:
        """Refuse a rule that no builder knows."""
        known = r"nearest:\d+|within:\d+(\.\d+)?|delaunay|gabriel|given(:.+)?"
        if not re.fullmatch(known, self.rule):
            raise PlanError(
                f"`graph.rule` must be one of {', '.join(GRAPH_RULES)} (K a whole number, KM "
                f"kilometres), got {shown(self.rule)}."
            )


@dataclass(frozen=True)
class EmergenceSection:
    """The emergence-only world."""

    propensity: str = _say(
        "How readily each tradition shows a motif by itself: equal, effort, recorded, covariates "
        "or margins.",
        "effort",
    )
    exponent: float = _say("Propensity is effort to this power.", 1.0)
    covariates: tuple[str, ...] = _say(
        "Traditions' columns that enter the covariate fit (propensity = covariates).", ()
    )

    def check(self) -> None:
        """Refuse values that cannot be used."""
        one_of("emergence.propensity", self.propensity, PROPENSITIES)
        between("emergence.exponent", self.exponent, 0.0, 10.0)
        if self.propensity == "covariates" and not self.covariates:
            raise PlanError(
                "`emergence.covariates` must name at least one column when `emergence.propensity` "
                'is covariates, got none. Add for instance covariates = ["altitude"].'
            )


@dataclass(frozen=True)
class AncestrySection:
    """The ancestry-only world."""

    level: str = _say(
        "Within which groups holders are drawn: family, branch, or none (no ancestry).", "family"
    )

    def check(self) -> None:
        """Refuse values that cannot be used."""
        one_of("ancestry.level", self.level, LEVELS)


@dataclass(frozen=True)
class SpreadSection:
    """The contact-only and transmission-only worlds."""

    turnover: str | float | tuple[float, ...] = _say(
        'Gains per loss: "fit" from the prevalence curve, a number above 0 and below 1, or a range '
        "[low, high] within which p-values are the largest.",
        "fit",
    )
    recording: str = _say(
        'Chance that a true holder is recorded: "fit" from effort, or "complete".', "fit"
    )
    reach: float = _say("Mean number of steps a contact goes along the graph.", 1.0)
    min_holders: int = _say("Motifs with fewer holders do not enter the prevalence fit.", 3)

    def check(self) -> None:
        """Refuse values that cannot be used."""
        if isinstance(self.turnover, str):
            one_of("spread.turnover", self.turnover, ("fit",), ", a number or a range")
        elif isinstance(self.turnover, tuple):
            _check_range(self.turnover)
        elif not 0.0 < self.turnover < 1.0:
            raise PlanError(
                f"`spread.turnover` must lie above 0 and below 1, got {self.turnover:g}."
            )
        one_of("spread.recording", self.recording, ("fit", "complete"))
        between("spread.reach", self.reach, 1.0, 100.0)
        between("spread.min_holders", self.min_holders, 1, 1000)


def _check_range(turnover: tuple[float, ...]) -> None:
    if len(turnover) != 2 or not 0.0 < turnover[0] < turnover[1] < 1.0:
        raise PlanError(
            "`spread.turnover` as a range must be two numbers above 0 and below 1, the lower one "
            f"first, got {shown(list(turnover))}."
        )


@dataclass(frozen=True)
class EvidenceSection:
    """What is computed and how it is judged."""

    alpha: float = _say("Level of every test.", 0.05)
    multiplicity: str = _say(
        'What the verdict looks at: "bh" or "by" adjusted values, or "none" (plain p-values).',
        "bh",
    )
    draws: int = _say("Draws of the emergence-only and ancestry-only worlds.", 99_999)
    walks: int = _say("Walks of the spread chain.", 10_000)
    seed: int = _say("Every random number comes from this one.", 1)
    worlds: tuple[str, ...] = _say(f"Which worlds are computed: {', '.join(WORLDS)}.", WORLDS)

    def check(self) -> None:
        """Refuse values that cannot be used."""
        between("evidence.alpha", self.alpha, 0.0001, 0.5)
        one_of("evidence.multiplicity", self.multiplicity, ("bh", "by", "none"))
        between("evidence.draws", self.draws, 99, 100_000_000)
        between("evidence.walks", self.walks, 100, 10_000_000)
        between("evidence.seed", self.seed, 0, 2**63 - 1)
        for world in self.worlds:
            one_of("evidence.worlds", world, WORLDS)
        if not self.worlds:
            raise PlanError("`evidence.worlds` must name at least one world, got none.")


@dataclass(frozen=True)
class SensitivitySection:
    """How far a verdict is to be trusted. Never decides one."""

    stability: bool = _say(
        "Whether the verdict is run again under other graphs, exponents, and without each family "
        "and region.",
        False,
    )
    graphs: tuple[str, ...] = _say(
        "Other contact graphs.", ("nearest:4", "nearest:5", "nearest:8", "delaunay", "gabriel")
    )
    exponents: tuple[float, ...] = _say("Other effort exponents.", (0.0, 0.5, 1.0))
    reaches: tuple[float, ...] = _say(
        "Other mean numbers of steps a contact goes along the graph.", (1.0, 1.5, 3.0)
    )
    regions: int = _say("Number of regions when the catalogue names none.", 6)
    draws: int = _say("Draws of each sensitivity run.", 9_999)
    hidden: bool = _say("Whether the hidden-propensity bound is computed.", True)
    hidden_km: float = _say(
        "Correlation length of the hidden propensity in kilometres; 0 takes the median extent of "
        "families.",
        0.0,
    )

    def check(self) -> None:
        """Refuse values that cannot be used."""
        for rule in self.graphs:
            GraphSection(rule=rule).check()
        for exponent in self.exponents:
            between("sensitivity.exponents", exponent, 0.0, 10.0)
        for reach in self.reaches:
            between("sensitivity.reaches", reach, 1.0, 100.0)
        between("sensitivity.regions", self.regions, 2, 50)
        between("sensitivity.draws", self.draws, 99, 100_000_000)
        zero_or_between("sensitivity.hidden_km", self.hidden_km, 1.0, 20_000.0)


@dataclass(frozen=True)
class ReportSection:
    """What leaves the machine."""

    round_degrees: float = _say(
        "Coordinates in published tables are rounded to this many degrees.", 1.0
    )

    def check(self) -> None:
        """Refuse values that cannot be used."""
        zero_or_between("report.round_degrees", self.round_degrees, 0.0001, 10.0)
