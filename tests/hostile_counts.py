"""Counts what the fuzzing runs threw and what came back, for reports/reliability/hostile.md."""

from __future__ import annotations

from collections import Counter, defaultdict
from pathlib import Path

REPORT = Path(__file__).resolve().parents[1] / "reports" / "reliability" / "hostile.md"
THROWN: Counter[str] = Counter()
READ: Counter[str] = Counter()
SLOWEST: defaultdict[str, float] = defaultdict(float)
_BEGIN, _END = "<!-- counts -->", "<!-- end of counts -->"
_HEAD = (
    "| reader | inputs | read | refused in words | slowest, s of processor |",
    "|---|---|---|---|---|",
)


def took(seconds: float) -> None:
    """Note how long the input took that :func:`counted` hears of next."""
    SLOWEST["next"] = max(SLOWEST["next"], seconds)


def counted(reader: str, said: str) -> None:
    """Note one input and whether it was refused."""
    THROWN[reader] += 1
    READ[reader] += not said
    SLOWEST[reader] = max(SLOWEST[reader], SLOWEST["next"])
    SLOWEST["next"] = 0.0


def write_counts(least: int = 250) -> None:
    """Put the counts of this run into the report's table, beside those of other readers."""
    if not REPORT.exists():
        return
    text = REPORT.read_text(encoding="utf-8")
    before, rest = text.split(_BEGIN)
    table, after = rest.split(_END)
    rows = {}
    for line in table.strip().splitlines()[2:]:
        rows[line.split("|")[1].strip()] = line
    for reader, thrown in THROWN.items():
        if thrown > least:
            rows[reader] = (
                f"| {reader} | {thrown:,} | {READ[reader]:,} | {thrown - READ[reader]:,} | "
                f"{SLOWEST[reader]:.2f} |"
            )
    total = sum(int(r.split("|")[2].replace(",", "")) for k, r in rows.items() if k != "all")
    rows["all"] = f"| all | {total:,} | | | |"
    ordered = [rows[k] for k in sorted(rows, key=lambda k: (k == "all", k))]
    lines = "\n".join([*_HEAD, *ordered])
    REPORT.write_text(f"{before}{_BEGIN}\n{lines}\n{_END}{after}", encoding="utf-8")
