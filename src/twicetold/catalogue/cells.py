"""Checks of single cells: ids, text, numbers, access marks; each fault has its own message."""

from __future__ import annotations

import math
import re
import unicodedata
from typing import Final

from twicetold.catalogue.limits import CELL_CHARS, ID_CHARS
from twicetold.catalogue.notes import Spot, shown

MISSING: Final = frozenset({"", "NA", "N/A", "?"})
"""Cells that say that a number, family, branch or region is not known."""

ACCESS: Final = ("open", "restricted", "withheld")
_NUMBER = re.compile(r"[+-]?([0-9]+(\.[0-9]*)?|\.[0-9]+)([eE][+-]?[0-9]{1,3})?")
_DECIMAL_COMMA = re.compile(r"[+-]?[0-9]+,[0-9]+")
_LINE_BREAKS = re.compile(r"[\r\n\t\x0b\x0c\x85\u2028\u2029]+")
_FORMULA_STARTS: Final = ("=", "+", "-", "@")


def is_hidden_character(character: str) -> bool:
    """Whether a character is a control code, a lone surrogate or a direction override."""
    return unicodedata.category(character) in ("Cc", "Cs") or character in "\u202d\u202e"


def _hidden(text: str) -> str:
    if text.isprintable():
        return ""
    return next((c for c in text if is_hidden_character(c)), "")


def as_number(text: str) -> float | None:
    """The number a cell holds, or None when it is not a plain finite decimal number."""
    if not _NUMBER.fullmatch(text):
        return None
    value = float(text)
    return value if math.isfinite(value) else None


def check_number(text: str, spot: Spot) -> float:
    """The number in a cell, or NaN with the reason noted."""
    value = as_number(text)
    if value is not None:
        return value
    if _DECIMAL_COMMA.fullmatch(text):
        spot.error(
            "decimal comma",
            f"{shown(text)} has a decimal comma.",
            "Write a decimal point, such as 52.5.",
        )
    elif text.startswith("="):
        spot.error(
            "formula",
            f"{shown(text)} is a formula.",
            "Replace it by its value (in the spreadsheet: paste as values).",
        )
    elif "−" in text and as_number(text.replace("−", "-")) is not None:
        spot.error(
            "minus sign",
            f"{shown(text)} has a typographic minus sign.",
            "Write a plain hyphen-minus, such as -12.5.",
        )
    else:
        hint = " (decimal degrees, not degrees and minutes)" if re.search("[°'′]", text) else ""
        spot.error(
            "not a number",
            f"{shown(text)} is not a number.",
            f"Write a plain decimal number{hint}, or leave the cell blank if it is not known.",
        )
    return math.nan


def clean_id(text: str, spot: Spot) -> str:
    """An id without outer blanks, or an empty string with the reason noted."""
    trimmed = text.strip()
    if not trimmed:
        spot.error("missing id", "has no id.", "Give every row an id, or remove the row.")
        return ""
    if len(trimmed) > ID_CHARS:
        spot.error(
            "id too long",
            f"the id {shown(trimmed, 30)} has {len(trimmed):,} characters.",
            f"Use an id of at most {ID_CHARS} characters.",
        )
        return ""
    if bad := _hidden(trimmed):
        spot.error(
            "control character",
            f"the id {shown(trimmed)} holds the invisible character U+{ord(bad):04X}.",
            "Type the id again without it.",
        )
        return ""
    if trimmed != text:
        spot.warn(
            "blanks around an id",
            f"the id {shown(text)} has blanks around it; they were left out.",
            "Remove the blanks.",
        )
    return trimmed


def clean_text(text: str, spot: Spot) -> str:
    """A text cell on one line without outer blanks; faults are noted."""
    if len(text) > CELL_CHARS:
        spot.error(
            "cell too long",
            f"has {len(text):,} characters.",
            f"Shorten it to at most {CELL_CHARS:,}; keep story texts out of the catalogue.",
        )
        return ""
    if not text.isprintable():
        joined = _LINE_BREAKS.sub(" ", text)
        if bad := _hidden(joined):
            spot.error(
                "control character",
                f"{shown(text)} holds the invisible character U+{ord(bad):04X}.",
                "Type the cell again without it.",
            )
            return ""
        text = joined
    return text.strip()


def warn_formula(text: str, spot: Spot) -> None:
    """Warn of a text cell that a spreadsheet would run as a formula."""
    if text.startswith(_FORMULA_STARTS) and len(text) > 1 and as_number(text) is None:
        spot.warn(
            "looks like a formula",
            f"{shown(text)} would be taken for a formula by a spreadsheet.",
            "Begin it with a letter or figure if you can; it is kept as it is.",
        )


def optional_text(text: str) -> str:
    """A label with the usual marks for "not known" read as blank."""
    trimmed = text.strip()
    return "" if trimmed in MISSING else trimmed


def access_of(text: str) -> str:
    """The access a cell names: blank is open; anything unknown is an empty string."""
    mark = text.strip().casefold()
    if not mark:
        return "open"
    return mark if mark in ACCESS else ""
