"""Digests of results, column by column, and the command that makes them anew.

    python tests/regression/digest.py            say what differs
    python tests/regression/digest.py --renew    write digests.json anew

``--renew`` refuses a changed number that CHANGELOG.md does not declare under "Numerical changes";
until the first release ("None: first version.") there is nothing that a number could differ from.
"""

from __future__ import annotations

import hashlib
import json
import math
import re
import sys
from pathlib import Path

HERE = Path(__file__).resolve().parent
KEPT = HERE / "digests.json"
CHANGELOG = HERE.parents[1] / "CHANGELOG.md"
RENEW = "python tests/regression/digest.py --renew"
#: Words, which may be said better without any number changing.
WORDS = ("reason",)
#: Shares and what rests on fits by iteration may differ by this much between machines.
TOLERANCE = 0.01


def cell(value: object) -> str:
    """Text of a cell: whole numbers and words as they are, other numbers to nine digits.

    p-values are counts over draws, so nine digits tell every two of them apart; means and ratios
    may differ in the last bits between processors and library versions.
    """
    if isinstance(value, float):
        return "" if math.isnan(value) else f"{value:.9g}"
    return str(value)


def digests(table, near=()) -> dict[str, object]:
    """SHA-256 of the whole table and (shortened) of each column; numbers of the ``near`` ones."""
    columns = {
        name: "\n".join([name, *map(cell, table[name].tolist())])
        for name in table.columns
        if name not in (*near, *WORDS)
    }
    whole = hashlib.sha256("\n\n".join(columns.values()).encode()).hexdigest()
    out: dict[str, object] = {
        "sha256": whole,
        "columns": {k: hashlib.sha256(v.encode()).hexdigest()[:12] for k, v in columns.items()},
    }
    close = [name for name in table.columns if name in near]
    if close:
        out["near"] = {
            name: [None if math.isnan(v) else float(f"{v:.6g}") for v in table[name].astype(float)]
            for name in close
        }
    return out


def changes() -> str:
    """All that CHANGELOG says under "Numerical changes"."""
    text = CHANGELOG.read_text(encoding="utf-8")
    return "".join(re.findall(r"^### Numerical changes\n(.*?)(?=^##|\Z)", text, re.M | re.S))


def declared() -> str:
    """SHA-256 of :func:`changes`."""
    return hashlib.sha256(changes().encode()).hexdigest()


def compute() -> dict[str, object]:
    """Rank every fixed catalogue."""
    from fixed_catalogues import FIXED, route_shares

    found: dict[str, object] = {
        name: digests(fixed.table(), fixed.near) for name, fixed in FIXED.items()
    }
    found["route shares"] = route_shares()
    return found


def apart(one, other) -> bool:
    """Whether two numbers or lists of numbers differ by more than the tolerance."""
    if isinstance(one, list) and isinstance(other, list):
        return len(one) != len(other) or any(map(apart, one, other))
    if one is None or other is None:
        return one is not other
    return abs(one - other) > TOLERANCE


def difference(name: str, kept, found) -> str:
    """Say what differs in one catalogue, or nothing."""
    if name == "route shares":
        moved = [m for m in kept.keys() | found.keys()
                 if m not in kept or m not in found or apart(kept[m], found[m])]  # fmt: skip
        return f"{name}: {', '.join(sorted(moved))}" if moved else ""
    was, now = kept["columns"], found["columns"]
    moved = [c for c in [*was, *(c for c in now if c not in was)] if was.get(c) != now.get(c)]
    near, nearby = kept.get("near", {}), found.get("near", {})
    moved += [c for c in near.keys() | nearby.keys() if apart(near.get(c), nearby.get(c))]
    if not moved and kept["sha256"] != found["sha256"]:
        moved = ["the order of columns"]
    return f"{name}: {', '.join(moved)}" if moved else ""


def complaint(differences: list[str]) -> str:
    """What to do about it."""
    return (
        "numerical change: declare it in CHANGELOG under Numerical changes, then regenerate with\n"
        f"    {RENEW}\nWhat changed (catalogue: columns):\n    " + "\n    ".join(differences)
    )


def main(words: list[str]) -> int:
    """Compare, or write anew."""
    sys.path.insert(0, str(HERE.parent))
    kept = json.loads(KEPT.read_text(encoding="utf-8")) if KEPT.exists() else {"results": {}}
    found = compute()
    old = kept["results"]
    moved = [d for n in old if n in found and (d := difference(n, old[n], found[n]))]
    for line in moved:
        print(f"differs: {line}")
    if "--renew" not in words:
        print(f"{len(moved)} of {len(found)} differ")
        return bool(moved)
    unreleased = changes().strip() == "- None: first version."
    if moved and kept.get("declared") == declared() and not unreleased:
        print("Not written: CHANGELOG.md declares nothing new under Numerical changes.")
        return 1
    text = json.dumps({"declared": declared(), "results": found}, indent=1, sort_keys=True)
    KEPT.write_text(text + "\n", encoding="utf-8")
    print(f"wrote {len(found)} to {KEPT.name}")
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
