"""The analysis plan: every choice that shapes a number, written out and checked.

The plan is the science; what only concerns the run (workers, progress, overwriting) is not in it.
"""

from __future__ import annotations

import dataclasses
import hashlib
import json
import re
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field, fields
from pathlib import Path
from typing import Any

from twicetold._plan_values import (
    between,
    coerced,
    one_of,
    plain_value,
    shown,
    toml_value,
    unknown_name,
    zero_or_between,
)
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

    turnover: str | float = _say(
        'Gains per loss: "fit" from the prevalence curve, or a number above 0 and below 1.', "fit"
    )
    recording: str = _say(
        'Chance that a true holder is recorded: "fit" from effort, or "complete".', "fit"
    )
    reach: float = _say("Mean number of steps a contact goes along the graph.", 1.0)
    min_holders: int = _say("Motifs with fewer holders do not enter the prevalence fit.", 3)

    def check(self) -> None:
        """Refuse values that cannot be used."""
        if isinstance(self.turnover, str):
            one_of("spread.turnover", self.turnover, ("fit",), " or a number")
        elif not 0.0 < self.turnover < 1.0:
            raise PlanError(
                f"`spread.turnover` must lie above 0 and below 1, got {self.turnover:g}."
            )
        one_of("spread.recording", self.recording, ("fit", "complete"))
        between("spread.reach", self.reach, 1.0, 100.0)
        between("spread.min_holders", self.min_holders, 1, 1000)


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


@dataclass(frozen=True)
class Plan:
    """Every choice of an analysis, in sections; see each section's fields for their meaning."""

    catalogue: CatalogueSection = field(default_factory=CatalogueSection)
    graph: GraphSection = field(default_factory=GraphSection)
    emergence: EmergenceSection = field(default_factory=EmergenceSection)
    ancestry: AncestrySection = field(default_factory=AncestrySection)
    spread: SpreadSection = field(default_factory=SpreadSection)
    evidence: EvidenceSection = field(default_factory=EvidenceSection)
    sensitivity: SensitivitySection = field(default_factory=SensitivitySection)
    report: ReportSection = field(default_factory=ReportSection)

    def __post_init__(self) -> None:
        for section in fields(self):
            getattr(self, section.name).check()

    def replace(self, **changes: Any) -> Plan:
        """Give a plan with some keys changed, named ``section__key``.

        Raises
        ------
        PlanError
            When a key is unknown or its value cannot be used.
        """
        nested: dict[str, dict[str, Any]] = {}
        for name, value in changes.items():
            section, _, key = name.partition("__")
            nested.setdefault(section, {})[key] = value
        return plan_from_mapping(nested, base=self)

    def choices(self) -> list[tuple[str, Any, str]]:
        """List every choice as (section.key, value, explanation)."""
        return [
            (f"{s.name}.{f.name}", getattr(getattr(self, s.name), f.name), f.metadata["explain"])
            for s in fields(self)
            for f in fields(getattr(self, s.name))
        ]

    def to_mapping(self) -> dict[str, dict[str, Any]]:
        """Give the plan as plain nested dictionaries (lists for tuples), as in its TOML."""
        out: dict[str, dict[str, Any]] = {}
        for name, value, _ in self.choices():
            section, key = name.split(".")
            out.setdefault(section, {})[key] = plain_value(value)
        return out

    def to_toml(self) -> str:
        """Write the plan as TOML, each key explained in a comment above it."""
        lines = [
            "# twicetold analysis plan. Every choice that shapes a number is here.",
            "# Register this file before you look at the results.",
        ]
        for section in fields(self):
            part = getattr(self, section.name)
            doc = (type(part).__doc__ or "").split("\n")[0].rstrip(".")
            lines += ["", f"[{section.name}]  # {doc}"]
            tables: list[str] = []
            for f in fields(part):
                value = getattr(part, f.name)
                explain = f"# {f.metadata['explain']}"
                if isinstance(value, Mapping):
                    tables += [explain, f"[{section.name}.{f.name}]"]
                    tables += [
                        f"{toml_value(str(k))} = {toml_value(list(v))}" for k, v in value.items()
                    ]
                else:
                    lines += [explain, f"{f.name} = {toml_value(value)}"]
            lines += tables
        return "\n".join(lines) + "\n"

    def digest(self) -> str:
        """SHA-256 of the plan's content (not of its comments)."""
        text = json.dumps(self.to_mapping(), sort_keys=True, ensure_ascii=False)
        return hashlib.sha256(text.encode()).hexdigest()


def read_plan(path: str | Path) -> Plan:
    """Read a plan from TOML, or from the ``run.json`` of an earlier run.

    Keys left out take their defaults.

    Raises
    ------
    PlanError
        When the file cannot be read, is neither TOML nor a run's record, holds an unknown key or
        an unusable value.
    """
    path = Path(path)
    text = _plan_text(path)
    try:
        if text.lstrip().startswith("{"):  # no TOML starts so
            return plan_from_mapping(_run_record(text)["plan"])
        return plan_from_mapping(tomllib.loads(text))
    except PlanError as err:
        raise PlanError(f"{path.name}: {err}") from err
    except (ValueError, RecursionError) as err:
        raise PlanError(f"{path.name}: not valid TOML: {err}. See `twicetold plan`.") from err


def recorded_order(path: str | Path) -> str | None:
    """Give the order (``--by``) that a ``run.json`` records; None for a plan in TOML.

    Raises
    ------
    PlanError
        As :func:`read_plan`.
    """
    path = Path(path)
    text = _plan_text(path)
    if not text.lstrip().startswith("{"):
        return None
    try:
        order = _run_record(text).get("by")
    except PlanError as err:
        raise PlanError(f"{path.name}: {err}") from err
    return order if isinstance(order, str) else None


def _run_record(text: str) -> dict[str, Any]:
    try:
        record = json.loads(text)
    except (ValueError, RecursionError) as err:
        raise PlanError(f"not valid JSON: {err}. Give a plan, or a run.json as written.") from err
    if not isinstance(record, dict) or not isinstance(record.get("plan"), dict):
        raise PlanError(
            'must hold a "plan", as run.json does. Give a plan, or an untouched record.'
        )
    return record


def _plan_text(path: Path) -> str:
    try:
        with path.open("rb") as file:  # what has no end says that it has no size
            raw = file.read(1_000_001)
        if len(raw) > 1_000_000:
            raise PlanError(f"{path.name}: a plan is a small TOML file; this one is over 1 MB.")
        return raw.decode("utf-8-sig")
    except PlanError:
        raise
    except OSError as err:
        raise PlanError(f"{path}: the plan cannot be read ({err.strerror}).") from err
    except UnicodeDecodeError as err:
        raise PlanError(
            f"{path.name}: a plan must be UTF-8 text; byte {err.start} is not. Save it as UTF-8."
        ) from err
    except ValueError as err:  # a name no file can have
        raise PlanError(f"{shown(str(path))}: the plan cannot be read ({err}).") from err


def plan_from_mapping(raw: Mapping[str, Any], base: Plan | None = None) -> Plan:
    """Make a plan from nested dictionaries over ``base`` (the defaults when None).

    Raises
    ------
    PlanError
        When a section or key is unknown or a value cannot be used.
    """
    base = base or Plan()
    sections = {f.name: getattr(base, f.name) for f in fields(base)}
    for name, values in raw.items():
        if name not in sections:
            raise PlanError(unknown_name("section", name, sections))
        if not isinstance(values, Mapping):
            raise PlanError(f"[{name}] must be a section of keys, got {shown(values)}.")
        known = {f.name: f for f in fields(sections[name])}
        changes = {}
        for key, value in values.items():
            if key not in known:
                raise PlanError(unknown_name(f"key in [{name}]", key, known))
            default = known[key].default
            if default is dataclasses.MISSING:
                default = getattr(sections[name], key)
            changes[key] = coerced(f"{name}.{key}", value, default)
        sections[name] = dataclasses.replace(sections[name], **changes)
    return Plan(**sections)
