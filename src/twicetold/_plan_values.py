"""Checking, reading and writing the plan's values. Used by ``plan`` only."""

from __future__ import annotations

import difflib
import json
import sys
from collections.abc import Mapping
from typing import Any

from twicetold.errors import PlanError

#: Characters of a wrong value that a message repeats.
_SHOWN = 120


def unknown_name(what: str, name: str, known: Mapping[str, Any]) -> str:
    """Say that a name is unknown, with the nearest known one."""
    near = difflib.get_close_matches(str(name)[:_SHOWN], list(known), n=1)
    hint = f" Did you mean {near[0]!r}?" if near else f" Known: {', '.join(known)}."
    return f"Unknown {what}: {shown(name)}.{hint}"


def coerced(name: str, value: Any, default: Any) -> Any:
    """Check the type of a value against its default's, widening whole numbers to decimals."""
    if name == "spread.turnover" and _is_number(value):
        return float(value)
    if name == "spread.turnover" and isinstance(value, list | tuple):
        ok = all(_is_number(v) for v in value)
        return tuple(float(v) for v in _typed(name, value, ok, "a list of numbers"))
    if name == "catalogue.presence" and isinstance(value, Mapping):
        return {str(k): _strings(f"{name}.{shown(k)}", v) for k, v in value.items()}
    if isinstance(default, bool):
        return _typed(name, value, isinstance(value, bool), "true or false")
    if isinstance(default, int):
        ok = isinstance(value, int) and not _is_bool(value)
        return _typed(name, value, ok, "a whole number")
    if isinstance(default, float):
        return float(_typed(name, value, _is_number(value), "a number"))
    if isinstance(default, tuple):
        if default and isinstance(default[0], float):
            ok = isinstance(value, list | tuple) and all(_is_number(v) for v in value)
            return tuple(float(v) for v in _typed(name, value, ok, "a list of numbers"))
        return _strings(name, value)
    return _typed(name, value, isinstance(value, str), "text in quotes")


def _is_bool(value: Any) -> bool:
    return isinstance(value, bool)


def _is_number(value: Any) -> bool:
    """Whether it is a finite number that fits a float (whole numbers have no end in TOML)."""
    if not isinstance(value, int | float) or _is_bool(value):
        return False
    return abs(value) <= sys.float_info.max


def shown(value: Any) -> str:
    """Give a value as a message can hold it: short, on one line, printable."""
    try:
        text = repr(value)
    except ValueError:  # a whole number of thousands of digits
        return "a number too long to show"
    text = "".join(c if c.isprintable() else ascii(c)[1:-1] for c in text)
    return text if len(text) <= _SHOWN else f"{text[:_SHOWN]}..."


def _strings(name: str, value: Any) -> tuple[str, ...]:
    ok = isinstance(value, list | tuple) and all(isinstance(v, str) for v in value)
    return tuple(_typed(name, value, ok, "a list of texts in quotes"))


def _typed(name: str, value: Any, ok: bool, what: str) -> Any:
    if not ok:
        raise PlanError(f"`{name}` must be {what}, got {shown(value)}.")
    return value


def one_of(name: str, value: str, allowed: tuple[str, ...], other: str = "") -> None:
    """Refuse a value outside a list of words."""
    if value not in allowed:
        raise PlanError(f"`{name}` must be one of {', '.join(allowed)}{other}, got {shown(value)}.")


def between(name: str, value: float, low: float, high: float) -> None:
    """Refuse a number outside a range."""
    if not low <= value <= high:
        raise PlanError(f"`{name}` must lie from {low:,} to {high:,}, got {_digits(value)}.")


def zero_or_between(name: str, value: float, low: float, high: float) -> None:
    """Refuse a number outside a range; 0 turns the matter off."""
    if value != 0.0 and not low <= value <= high:
        raise PlanError(
            f"`{name}` must be 0 or lie from {low:,} to {high:,}, got {_digits(value)}."
        )


def _digits(value: float) -> str:
    """Give a number with its thousands set apart, or as a power where it is very long."""
    if abs(value) < 1e18:
        return f"{value:,}"
    return f"{value:.3g}" if abs(value) <= sys.float_info.max else shown(value)


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
