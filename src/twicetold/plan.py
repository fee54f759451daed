"""The analysis plan: every choice that shapes a number, written out and checked.

The plan is the science; what only concerns the run (workers, progress, overwriting) is not in it.
"""

from __future__ import annotations

import dataclasses
import hashlib
import json
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field, fields
from pathlib import Path
from typing import Any

from twicetold._plan_sections import (
    COLUMNS,
    GRAPH_RULES,
    LEVELS,
    PROPENSITIES,
    WORLDS,
    AncestrySection,
    CatalogueSection,
    EmergenceSection,
    EvidenceSection,
    GraphSection,
    ReportSection,
    SensitivitySection,
    SpreadSection,
)
from twicetold._plan_values import coerced, plain_value, shown, toml_value, unknown_name
from twicetold.errors import PlanError

__all__ = [
    "COLUMNS",
    "GRAPH_RULES",
    "LEVELS",
    "PROPENSITIES",
    "WORLDS",
    "AncestrySection",
    "CatalogueSection",
    "EmergenceSection",
    "EvidenceSection",
    "GraphSection",
    "Plan",
    "ReportSection",
    "SensitivitySection",
    "SpreadSection",
    "plan_from_mapping",
    "read_plan",
    "recorded_order",
]


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
