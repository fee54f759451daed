r"""Tables of a deposit for LaTeX: booktabs, longtable, columns that fit the page.

Everything is plain ASCII but for scripts that classic LaTeX cannot set. Those stand in
``\otherscript{text}{code points}``: LuaLaTeX and XeLaTeX set the text (with a font that has it),
pdfLaTeX shows the code points. The CSV tables hold every text as it is.
"""

from __future__ import annotations

import math
import re
import unicodedata
from collections.abc import Sequence
from dataclasses import dataclass

from twicetold.report.supplement._signs import ACCENTS, OTHERS, PLAIN
from twicetold.report.supplement.table import NUMERIC, Column, Table

#: Letters of the small type that fit one line of a landscape page, blanks between columns aside.
LINE = 168
#: What the blank beside each column takes, in letters.
GAP = 3.0
WIDEST, NARROWEST = 34, 5
_WIDE = frozenset("mwMW@%&—…")
_POINTS_SHOWN = 12

PREAMBLE = r"""\documentclass[a4paper]{article}
\usepackage[T1]{fontenc}
\ifx\directlua\undefined\ifx\XeTeXversion\undefined
  \usepackage[utf8]{inputenc}
  \newcommand{\otherscript}[2]{#2}
\fi\fi
\providecommand{\otherscript}[2]{#1} % LuaLaTeX or XeLaTeX: choose a font that has the script
\usepackage{textcomp}
\usepackage[landscape,margin=15mm]{geometry}
\usepackage{array,booktabs,longtable}
\setlength{\tabcolsep}{3pt}
\setlength{\LTcapwidth}{\linewidth}
\setlength{\LTleft}{0pt}
\setlength{\parindent}{0pt}
\emergencystretch=2em
"""


def document(tables: Sequence[Table], *, title: str, notice: str) -> str:
    """Give the document that sets every table, each from its own file beside it."""
    parts = [PREAMBLE, r"\begin{document}", r"{\Large " + escaped(title) + r"\par}", r"\medskip"]
    if notice:
        parts += [escaped(notice) + r"\par", r"\medskip"]
    parts += [rf"\input{{{t.name}.tex}}" for t in tables]
    return "\n".join([*parts, r"\end{document}", ""])


def fragment(table: Table) -> str:
    """Give one table as one or more longtables, wide ones in panels of columns."""
    cells = [
        [_shown(text, c) for text, c in zip(row, table.columns, strict=True)] for row in table.rows
    ]
    columns = [[row[k] for row in cells] for k in range(len(table.columns))]
    # A column without a single entry is left to the CSV table.
    natural = [
        _width(c, col) if any(col) else 0.0 for c, col in zip(table.columns, columns, strict=True)
    ]
    panels = _panels(table, natural)
    head = (
        f"% {table.name}: needs array, booktabs, longtable and \\otherscript; see supplement.tex\n"
    )
    many = len(panels) > 1
    return head + "\n".join(
        _longtable(table, panel, cells, f" ({k} of {len(panels)})" if many else "")
        for k, panel in enumerate(panels, 1)
    )


@dataclass(frozen=True)
class _Panel:
    """Columns of one longtable by index, with their widths in letters."""

    columns: tuple[int, ...]
    widths: tuple[float, ...]


def _panels(table: Table, natural: list[float]) -> list[_Panel]:
    """Fill lines with columns from the left; every panel begins with the names of the rows."""
    names = [k for k, c in enumerate(table.columns) if c.name in table.key[:2]] or [0]
    widths = [min(w, WIDEST) for w in natural]
    panels: list[list[int]] = []
    used = math.inf
    for k in range(len(table.columns)):
        if k in names or not natural[k]:
            continue
        if used + widths[k] + GAP > LINE:
            panels.append(list(names))
            used = sum(widths[j] + GAP for j in names)
        panels[-1].append(k)
        used += widths[k] + GAP
    return [_spread(p, widths, natural) for p in panels or [names]]


def _spread(columns: list[int], widths: list[float], natural: list[float]) -> _Panel:
    """Give what is left of the line to columns that could do with more."""
    spare = max(LINE - sum(widths[k] + GAP for k in columns), 0.0)
    wanted = {k: natural[k] - widths[k] for k in columns}
    share = min(1.0, spare / total) if (total := sum(wanted.values())) > 0 else 0.0
    return _Panel(tuple(columns), tuple(widths[k] + share * wanted[k] for k in columns))


def _longtable(table: Table, panel: _Panel, cells: list[list[str]], part: str) -> str:
    spec = []
    for k, width in zip(panel.columns, panel.widths, strict=True):
        side = r"\raggedleft" if table.columns[k].kind in NUMERIC else r"\raggedright"
        share = min((width + GAP) / LINE, 1.0)
        spec.append(
            rf">{{{side}\arraybackslash}}p{{\dimexpr {share:.4f}\linewidth-2\tabcolsep\relax}}"
        )
    heads = [_head(table.columns[k].name) for k in panel.columns]
    caption = rf"\textbf{{{escaped(table.name)}}}{part}. {escaped(table.title)}"
    lines = [
        r"{\scriptsize",
        r"\begin{longtable}{" + "\n".join(spec) + "}",
        rf"\caption*{{{caption}}}\\",
        r"\toprule",
        " & ".join(heads) + r"\\",
        r"\midrule",
        r"\endfirsthead",
        rf"\caption*{{{escaped(table.name)}{part}, continued}}\\",
        r"\toprule",
        " & ".join(heads) + r"\\",
        r"\midrule",
        r"\endhead",
        r"\bottomrule",
        r"\endfoot",
    ]
    for row in cells:
        shown = [
            row[k] if table.columns[k].kind in NUMERIC else _pieces(row[k], w)
            for k, w in zip(panel.columns, panel.widths, strict=True)
        ]
        lines.append(" & ".join(shown) + r"\\")
    return "\n".join([*lines, r"\end{longtable}}", ""])


def _shown(text: str, column: Column) -> str:
    """Numbers to four digits in LaTeX already; other text as it is."""
    if column.kind not in NUMERIC or text == "":
        return text
    if text.endswith("INF"):
        return r"$-\infty$" if text.startswith("-") else r"$\infty$"
    short = text
    if column.kind == "number":
        value = float(text)
        short = f"{value:.4g}"
        if "e" in short:
            mantissa, power = short.split("e")
            return rf"${mantissa}\times10^{{{int(power)}}}$"
        if abs(value) >= 1e4:
            short = f"{value:.0f}"
    return f"${short}$" if short.startswith("-") else short


def _width(column: Column, cells: list[str]) -> float:
    """Width a column would like, in letters of the small type."""
    head = max(_long(piece) for piece in _parts(column.name)) + 1.0
    if column.kind in NUMERIC:
        bare = [c.replace(r"\times10^", "xx").strip("$").replace("{", "") for c in cells]
        return max(NARROWEST, head, *(len(c) + 0.5 for c in bare)) if bare else max(NARROWEST, head)
    whole = max((_long(c) for c in cells), default=0.0)
    return max(whole, head, NARROWEST)


def _long(text: str) -> float:
    """Length of a text in letters of middling width."""
    return sum(
        1.0
        if c.islower() or c == " "
        else 1.25
        if c.isascii() and c not in _WIDE
        else 6.5  # shown as a code point by pdfLaTeX
        if not _can_set(c)
        else 1.6
        for c in text
    )


def _parts(name: str) -> list[str]:
    """A column's name in the parts between which its line may break."""
    return re.findall(r"[^_]*_+|[^_]+", name)


def _head(name: str) -> str:
    return r"\allowbreak{}".join(escaped(part) for part in _parts(name))


def _pieces(text: str, width: float) -> str:
    """Escape a text so that every word can be broken to fit the width."""
    words = []
    for word in text.split(" "):
        if _long(word) <= width - 1:
            words.append(escaped(word).replace(r"\_", r"\_\allowbreak{}"))
            continue
        step = max(2, int(width / 4))
        clusters = _clusters(word)
        parts = ["".join(clusters[k : k + step]) for k in range(0, len(clusters), step)]
        words.append(r"\allowbreak{}".join(escaped(part) for part in parts))
    return " ".join(words)


def _clusters(word: str) -> list[str]:
    """Letters with the marks that belong to them."""
    out: list[str] = []
    for sign in word:
        if out and unicodedata.combining(sign):
            out[-1] += sign
        else:
            out.append(sign)
    return out


def _can_set(sign: str) -> bool:
    if sign.isascii() or sign in OTHERS:
        return True
    base, *marks = list(unicodedata.normalize("NFD", sign))
    return base.isascii() and base.isalpha() and all(m in ACCENTS for m in marks) and len(marks) < 3


def escaped(text: str) -> str:
    """Give a text so that LaTeX sets it as it stands."""
    out: list[str] = []
    other: list[str] = []
    for cluster in _clusters(unicodedata.normalize("NFC", text)):
        made = _cluster(cluster)
        if made is None:
            other.append(cluster)
            continue
        if other:
            out.append(_other("".join(other)))
            other = []
        out.append(made)
    if other:
        out.append(_other("".join(other)))
    return "".join(out)


def _cluster(cluster: str) -> str | None:
    """One letter with its marks, or None where classic LaTeX has no way to set it."""
    if cluster in PLAIN:
        return PLAIN[cluster]
    if cluster in OTHERS:
        return OTHERS[cluster]
    if len(cluster) == 1 and cluster.isascii():
        return cluster if cluster.isprintable() else " "
    base, *marks = list(unicodedata.normalize("NFD", cluster))
    if not (base.isascii() and base.isalpha()) or not 1 <= len(marks) <= 2:
        return None
    if any(m not in ACCENTS for m in marks):
        return None
    below = sum(m in "\u0323\u0327\u0328\u0331" for m in marks)
    if len(marks) == 2 and below != 1:
        return None  # two marks on one side need more than accent commands
    marks.sort(key=lambda m: m in "\u0323\u0327\u0328\u0331")
    letter = rf"\{base}" if base in "ij" and marks[0] not in "\u0323\u0327\u0328\u0331" else base
    made = rf"\{ACCENTS[marks[0]]}{{{letter}}}"
    return made if len(marks) == 1 else rf"\{ACCENTS[marks[1]]}{{{made}}}"


def _other(text: str) -> str:
    points = [f"U+{ord(c):04X}" for c in text]
    more = r" \ldots{}" if len(points) > _POINTS_SHOWN else ""
    shown = r"\allowbreak{} ".join(points[:_POINTS_SHOWN])
    safe = "".join(" " if c.isspace() or not c.isprintable() else c for c in text)
    return rf"\otherscript{{{safe}}}{{{{[}}{shown}{more}{{]}}}}"
