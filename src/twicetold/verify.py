"""Computing the tables of a deposit again, and saying whether they agree to the last digit.

What rests on exact distances cannot be had from rounded coordinates. The contact graph and its
bridges are taken from the deposit; every other number comes anew from the records and the plan.
"""

from __future__ import annotations

import hashlib
import tempfile
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from twicetold.catalogue import Catalogue, CatalogueRules, read_catalogue
from twicetold.errors import TwicetoldError
from twicetold.evidence import rank_catalogue
from twicetold.evidence.contacts import KnownContacts, known_contacts, set_key
from twicetold.evidence.rounded import compare_rounded
from twicetold.plan import Plan, read_plan
from twicetold.report.supplement import frame_rows, read_run
from twicetold.report.supplement.source import Rows, Run, contacts_graph, whole_tables
from twicetold.report.supplement.table import Table, csv_text, read_rows
from twicetold.report.supplement.tables import (
    contacts_table,
    plan_table,
    traditions_table,
    with_infinity,
)
from twicetold.run import contacts_frame, run_tables
from twicetold.workers import Pool

#: Columns and tables that rest on exact distances.
DISTANCE_COLUMNS = ("hidden_bound", "stability")
DISTANCE_TABLES = ("S4_hidden", "S4_hidden_lengths", "S4_stability", "S4_stability_runs")
#: Made from records that are no longer there.
WITHDRAWN_TABLES = ("S4_moved",)
_MOST_SAID = 5


@dataclass(frozen=True)
class _Deposit:
    """A deposit's folder, read."""

    folder: Path
    plan: Plan
    catalogue: Catalogue
    provenance: Mapping[str, str]
    tables: Mapping[str, Rows]

    @property
    def exact(self) -> bool:
        """Whether the coordinates are as they were used."""
        return self.plan.report.round_degrees <= 0


def verify_deposit(deposit: Path, *, pool: Pool) -> tuple[bool, list[str]]:
    """Compute a deposit's tables again from its records, plan and contact graph.

    Parameters
    ----------
    deposit : Path
        Folder that ``supplement`` wrote; or a run's own folder, whose tables are then computed
        again from exact coordinates and, where the plan let them in, restricted records.
    pool : Pool

    Returns
    -------
    agrees : bool
    lines : list of str
        What was compared, what could not be, and every difference.

    Raises
    ------
    TwicetoldError
        When the folder is neither.
    """
    deposit = Path(deposit)
    if (deposit / "run.json").exists() and not (deposit / "datapackage.json").exists():
        return _verify_run(read_run(deposit), pool)
    if not (deposit / "files.csv").exists():
        raise TwicetoldError(
            f"{deposit} must be a folder that `twicetold supplement` (or `rank`) wrote; it has no "
            "files.csv. Give such a folder."
        )
    with whole_tables(deposit):
        altered, listed = altered_files(deposit)
    lines = [f"Differs from its digest: {name}" for name in altered]
    if not altered:
        lines.append(f"All {listed} files listed are as they were written.")
    if not (deposit / "catalogue").is_dir():
        lines.append(
            "NOT VERIFIED: restricted records took part and are not in this deposit, so its "
            "numbers cannot be computed again from it. Who may see those records can run "
            "`twicetold verify` on the run's own folder."
        )
        return False, lines
    with whole_tables(deposit):
        found = _read(deposit)
        contacts = _known_contacts(found)
    compared = _compare(found, contacts, pool)
    lines += compared.lines()
    agrees = not altered and not compared.differences
    lines.append(
        "VERIFIED: every number compared agrees to the last digit."
        if agrees
        else "NOT VERIFIED: see the differences above."
    )
    return agrees, lines


def altered_files(deposit: Path) -> tuple[list[str], int]:
    """Files missing, changed or added since the deposit was written, and how many are listed."""
    header, rows = read_rows(deposit / "files.csv", guard=True)
    if header != ("file", "bytes", "sha256"):
        raise TwicetoldError("files.csv must have the columns file, bytes and sha256.")
    known = {row[0]: row[2] for row in rows}
    found = {
        p.relative_to(deposit).as_posix(): p for p in sorted(deposit.rglob("*")) if p.is_file()
    }
    for name in ("files.csv", "datapackage.json"):
        found.pop(name, None)
    changed = []
    for name, digest in known.items():
        path = found.get(name)
        if path is None:
            changed.append(f"{name} (missing)")
        elif hashlib.sha256(path.read_bytes()).hexdigest() != digest:
            changed.append(name)
    changed += [f"{name} (not listed)" for name in found if name not in known]
    return changed, len(known)


@dataclass
class _Compared:
    """What was compared, and what came out."""

    said: list[str]
    differences: list[str]

    def table(self, name: str, given: Rows, computed: Rows, *, skip: Sequence[str] = ()) -> None:
        """Compare two tables cell by cell, as text."""
        header, rows = given
        again = list(with_infinity(computed[1]))
        wanted = [c for c in computed[0] if c not in skip]
        found: list[str] = []
        if [c for c in header if c not in skip] != wanted:
            found.append(f"columns {', '.join(header)}; computed {', '.join(computed[0])}")
        else:
            if len(rows) != len(again):
                found.append(f"{len(rows):,} rows; computed {len(again):,}")
            pairs = [(header.index(c), computed[0].index(c), c) for c in wanted]
            for k, (row, new) in enumerate(zip(rows, again, strict=False), 1):
                found += _different_cells(header, pairs, k, row, new)
        self.differences += [f"Differs: {name}, {what}" for what in found[:_MOST_SAID]]
        if len(found) > _MOST_SAID:
            self.differences.append(f"and {len(found) - _MOST_SAID:,} more in {name}.")
        gone = ", ".join(c for c in header if c in skip)
        left = f" (not {gone})" if gone else ""
        self.said.append(f"Compared {name}: {len(rows):,} rows, {len(wanted)} columns{left}.")

    def lines(self) -> list[str]:
        """Everything said, differences last."""
        return [*self.said, *self.differences]


def _different_cells(
    header: Sequence[str],
    pairs: Sequence[tuple[int, int, str]],
    k: int,
    row: Sequence[str],
    new: Sequence[str],
) -> list[str]:
    """Say where two rows differ; ``pairs`` are places of a column in both, and its name."""
    which = _named(header, row) or f"row {k}"
    if len(row) != len(header):
        return [f"{which}: {len(row)} cells; must have {len(header)}"]
    return [
        f"{which}, {column}: {row[i] or 'blank'}; computed {new[j] or 'blank'}"
        for i, j, column in pairs
        if row[i] != new[j]
    ]


def _named(header: Sequence[str], row: Sequence[str]) -> str:
    for column, word in (("motif_id", "motif"), ("tradition_id", "tradition")):
        if column in header and len(row) == len(header):
            return f"{word} {row[header.index(column)]}"
    return ""


def _read(deposit: Path) -> _Deposit:
    plan = read_plan(deposit / "plan.toml")
    tables = {p.stem: read_rows(p, guard=True) for p in sorted(deposit.glob("S[0-9]_*.csv"))}
    for name in ("S1_motifs", "S2_traditions", "S3_contacts", "S5_provenance"):
        if name not in tables:
            raise TwicetoldError(f"{deposit} lacks the table {name}.csv. Write the deposit again.")
    return _Deposit(
        folder=deposit,
        plan=plan,
        catalogue=read_guarded(deposit / "catalogue"),
        provenance={row[0]: row[1] for row in tables["S5_provenance"][1]},
        tables=tables,
    )


def read_guarded(folder: Path) -> Catalogue:
    """Read a deposit's catalogue: the apostrophes against formulas are taken away first."""
    with tempfile.TemporaryDirectory(prefix="twicetold-") as name:
        for path in sorted(folder.iterdir()):
            plain = Path(name) / path.name
            if path.suffix != ".csv":
                plain.write_bytes(path.read_bytes())
                continue
            header, rows = read_rows(path, guard=True)
            bare = csv_text(header, rows, [False] * len(header))
            plain.write_text(bare, encoding="utf-8", newline="\n")
        catalogue = read_catalogue(name, CatalogueRules())
    return replace(catalogue, land=None)


def _known_contacts(deposit: _Deposit) -> KnownContacts:
    """The contact graph of the deposit and its bridges for every set of traditions searched."""
    c = deposit.catalogue
    whole = contacts_graph(c, *deposit.tables["S3_contacts"], rule=deposit.plan.graph.rule)
    header, rows = deposit.tables.get("S3_bridges", (("motif_id", "tradition_id"), []))
    if "neighbour_id" not in header and rows:
        raise TwicetoldError("S3_bridges.csv must have a column neighbour_id. Write it again.")
    place = {t: k for k, t in enumerate(c.tradition_ids)}
    motif = {m: k for k, m in enumerate(c.motif_ids)}
    found: dict[bytes, list[tuple[int, int]]] = {}
    for row in rows:
        try:
            mask = c.surveyed(motif[row[0]])
            found.setdefault(set_key(mask), []).append((place[row[1]], place[row[2]]))
        except KeyError as err:
            raise TwicetoldError(
                f"S3_bridges.csv names {err.args[0]!r}, which the catalogue does not have."
            ) from err
    pairs = {k: np.array(v, dtype=np.int32).reshape(-1, 2) for k, v in found.items()}
    return KnownContacts(whole, pairs, c.latitude, c.longitude)


def _compare(deposit: _Deposit, contacts: KnownContacts, pool: Pool) -> _Compared:
    """Compute every table that can be had again, and compare."""
    c, plan, tables = deposit.catalogue, deposit.plan, deposit.tables
    out = _Compared([], [])
    rebuilt = deposit.exact and not plan.graph.rule.startswith("given:")
    if not rebuilt:
        out.said.append(
            "The contact graph and its bridges are taken from S3: they come from exact coordinates "
            "or a file that are not in the deposit."
        )
    asked = plan if deposit.exact else _without_distances(plan)
    ranking = rank_catalogue(
        c,
        asked,
        pool=pool,
        by=deposit.provenance.get("order", "evidence"),
        cache=False,
        contacts=None if rebuilt else contacts,
    )
    graph = ranking.graph if rebuilt else contacts.whole
    skip = () if deposit.exact else DISTANCE_COLUMNS
    out.table("S1_motifs", tables["S1_motifs"], frame_rows(ranking.motifs), skip=skip)
    everything = range(c.n_motifs)
    for table in (traditions_table(c, graph, everything), contacts_table(c, graph)):
        out.table(table.name, tables[table.name], _rows(table))
    if plan.digest() != deposit.provenance.get("plan_sha256"):
        out.differences.append("Differs: plan.toml is not the plan whose digest S5 records.")
    out.table("S5_plan", tables.get("S5_plan", ((), [])), _rows(plan_table(plan)))
    computed = {f"S4_{k}": frame_rows(v) for k, v in run_tables(ranking).items()}
    if "S4_rounded" in tables:
        again = rank_catalogue(c, _without_distances(plan), pool=pool, cache=False, details=False)
        frame = compare_rounded(ranking.motifs, again.motifs)
        computed["S4_rounded"] = frame_rows(frame)
    _compare_sensitivity(out, deposit, computed)
    return out


def _compare_sensitivity(out: _Compared, deposit: _Deposit, computed: Mapping[str, Rows]) -> None:
    away = WITHDRAWN_TABLES if deposit.exact else (*WITHDRAWN_TABLES, *DISTANCE_TABLES)
    for name in (n for n in deposit.tables if n.startswith("S4_")):
        if name in away:
            why = (
                "the withdrawn records are not there any more"
                if name in WITHDRAWN_TABLES
                else "it rests on exact distances"
            )
            out.said.append(f"Not compared: {name}, since {why}.")
        elif name in computed:
            out.table(name, deposit.tables[name], computed[name])
        elif not deposit.exact:
            out.said.append(
                f"Not compared: {name}, which comes with runs that need exact coordinates."
            )
        else:
            out.differences.append(f"Differs: {name}: nothing of that name was computed.")


def _without_distances(plan: Plan) -> Plan:
    return plan.replace(sensitivity__stability=False, sensitivity__hidden=False)


def _infinite(rows: Rows) -> Rows:
    return rows[0], list(with_infinity(rows[1]))


def _rows(table: Table) -> Rows:
    return table.header, list(table.rows)


def _verify_run(run: Run, pool: Pool) -> tuple[bool, list[str]]:
    """Compute a run's tables again from its own folder."""
    out = _Compared([], [])
    contacts = None
    if run.plan.graph.rule.startswith("given:"):
        contacts = known_contacts(run.catalogue, run.graph, bridges=run.plan.graph.bridges)
        out.said.append("The contact graph is taken from contacts.csv; its file was given.")
    ranking = rank_catalogue(
        run.catalogue,
        run.plan,
        pool=pool,
        by=str(run.record.get("by", "evidence")),
        cache=False,
        contacts=contacts,
    )
    out.table("motifs", _infinite(run.motifs), frame_rows(ranking.motifs))
    given = read_rows(run.folder / "contacts.csv")
    out.table("contacts", given, frame_rows(contacts_frame(ranking)))
    computed = run_tables(ranking)
    for name, rows in run.tables.items():
        if f"S4_{name}" in WITHDRAWN_TABLES:
            out.said.append(f"Not compared: {name}, since the withdrawn records are not there.")
        elif name in computed:
            out.table(name, _infinite(rows), frame_rows(computed[name]))
        else:
            out.differences.append(f"Differs: {name}: nothing of that name was computed.")
    agrees = not out.differences
    last = (
        "VERIFIED: every number compared agrees to the last digit."
        if agrees
        else "NOT VERIFIED: see the differences above."
    )
    return agrees, [*out.lines(), last]
