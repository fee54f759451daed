"""Checking, reading and writing the plan's values. Used by ``plan`` only."""

from __future__ import annotations

import difflib
import json
import math
from collections.abc import Mapping
from typing import Any

from twicetold.errors import PlanError


def unknown_name(what: str, name: str, known: Mapping[str, Any]) -> str:
    """Say that a name is unknown, with the nearest known one."""
    near = difflib.get_close_matches(str(name), list(known), n=1)
    hint = f" Did you mean {near[0]!r}?" if near else f" Known: {', '.join(known)}."
    return f"Unknown {what}: {name!r}.{hint}"


def coerced(name: str, value: Any, default: Any) -> Any:
    """Check the type of a value against its default's, widening whole numbers to decimals."""
    if name == "spread.turnover" and isinstance(value, int | float) and not _is_bool(value):
        return float(value)
    if name == "catalogue.presence" and isinstance(value, Mapping):
        return {str(k): _strings(f"{name}.{k}", v) for k, v in value.items()}
    if isinstance(default, bool):
        return _typed(name, value, isinstance(value, bool), "true or false")
    if isinstance(default, int):
        ok = isinstance(value, int) and not _is_bool(value)
        return _typed(name, value, ok, "a whole number")
    if isinstance(default, float):
        ok = isinstance(value, int | float) and not _is_bool(value) and math.isfinite(value)
        return float(_typed(name, value, ok, "a number"))
    if isinstance(default, tuple):
        if default and isinstance(default[0], float):
            ok = isinstance(value, list | tuple) and all(
                isinstance(v, int | float) and not _is_bool(v) and math.isfinite(v) for v in value
            )
            return tuple(float(v) for v in _typed(name, value, ok, "a list of numbers"))
        return _strings(name, value)
    return _typed(name, value, isinstance(value, str), "text in quotes")


def _is_bool(value: Any) -> bool:
    return isinstance(value, bool)


def _strings(name: str, value: Any) -> tuple[str, ...]:
    ok = isinstance(value, list | tuple) and all(isinstance(v, str) for v in value)
    return tuple(_typed(name, value, ok, "a list of texts in quotes"))


def _typed(name: str, value: Any, ok: bool, what: str) -> Any:
    if not ok:
        raise PlanError(f"`{name}` must be {what}, got {value!r}.")
    return value


def one_of(name: str, value: str, allowed: tuple[str, ...], other: str = "") -> None:
    """Refuse a value outside a list of words."""
    if value not in allowed:
        raise PlanError(f"`{name}` must be one of {', '.join(allowed)}{other}, got {value!r}.")


def between(name: str, value: float, low: float, high: float) -> None:
    """Refuse a number outside a range."""
    if not low <= value <= high:
        raise PlanError(f"`{name}` must lie from {low:,} to {high:,}, got {value:,}.")


def plain_value(value: Any) -> Any:
    """Give lists for tuples, all the way down."""
    if isinstance(value, tuple):
        return list(value)
    if isinstance(value, Mapping):
        return {k: plain_value(v) for k, v in value.items()}
    return value


def toml_value(value: Any) -> str:
    """Write one value as TOML."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, tuple | list):
        return "[" + ", ".join(toml_value(v) for v in value) + "]"
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    return repr(value)
