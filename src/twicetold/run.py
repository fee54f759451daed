"""What the commands do: read, check, compute, write. The only place where files meet results."""

from __future__ import annotations

import itertools
import time
from collections.abc import Callable
from contextlib import AbstractContextManager, nullcontext
from pathlib import Path
from typing import TYPE_CHECKING, Any

from twicetold._records import (
    contacts_frame,
    csv_text,
    evidence_record,
    json_text,
    run_record,
    run_tables,
    versions,
    write_csv,
)
from twicetold.folders import Claim, claimed, new_folder, write_text
from twicetold.plan import COLUMNS, Plan

if TYPE_CHECKING:
    import pandas as pd

    from twicetold.catalogue import Catalogue, CatalogueRules
    from twicetold.evidence import Ranking
    from twicetold.report.supplement import Run
    from twicetold.workers import Pool

__all__ = [
    "check_tables",
    "contacts_frame",
    "csv_text",
    "evidence_record",
    "motif_run",
    "power_run",
    "rank_run",
    "resolved_plan",
    "rounded_again",
    "rules_of",
    "run_record",
    "run_tables",
    "supplement_run",
    "verify_run",
    "versions",
    "write_csv",
    "write_demonstration",
    "write_text",
]

#: Traditions from which one motif may take minutes; a quarter of it, of its holders.
LARGE = 1200


def write_demonstration(folder: Path) -> Path:
    """Write the invented archipelago."""
    from twicetold.example import write_example

    with new_folder(folder) as part:
        write_example(part)
    return folder


def rules_of(plan: Plan) -> CatalogueRules:
    """Give the part of the plan that says how tables are read."""
    from twicetold.catalogue import CatalogueRules

    part = plan.catalogue
    return CatalogueRules(
        presence=part.presence,  # type: ignore[arg-type]
        absent_rows=part.absent_rows,  # type: ignore[arg-type]
        restricted=part.restricted,
        without=part.without,
        # A column of the part's own name is found without being asked for, and may be missing.
        **{name: "" if (column := getattr(part, name)) == name else column for name in COLUMNS},
    )


def check_tables(path: Path, plan: Plan) -> tuple[bool, list[str]]:
    """Say whether a catalogue is ready, and every problem or remark."""
    from twicetold.catalogue import check_catalogue

    catalogue, problems = check_catalogue(path, rules_of(plan))
    if catalogue is None:
        noun = "problem" if len(problems) == 1 else "problems"
        return False, [f"{len(problems)} {noun} in {path.name}:", *map(str, problems)]
    lines = [f"Remark: {w}" for w in catalogue.warnings]
    sets = len(catalogue.surveyed_sets)
    families = len({f for f in catalogue.family if f})
    left_out = len(catalogue.unlocated)
    lines += [
        f"{catalogue.title or path.name}: {catalogue.n_traditions:,} traditions, "
        f"{catalogue.n_motifs:,} motifs, {catalogue.attested.nnz:,} attestations, "
        f"{families:,} families, effort {'given' if catalogue.effort is not None else 'not given'}"
        + (f", {sets:,} surveyed sets" if sets > 1 else "")
        + (f"; {left_out:,} traditions without coordinates left out" if left_out else "")
        + ".",
    ]
    if catalogue.notice:
        lines.append(catalogue.notice)
    return True, [*lines, "ready"]


def resolved_plan(path: Path, plan: Plan) -> Plan:
    """Give the plan with everything the catalogue decides written out.

    Raises
    ------
    TwicetoldError
        When a run of this plan would be refused: a plan is registered before it is run.
    """
    from twicetold.catalogue import read_catalogue
    from twicetold.evidence.propensities import group_propensity
    from twicetold.evidence.study import prepare

    catalogue = read_catalogue(path, rules_of(plan))
    _check_rounding(catalogue, plan)
    study = prepare(catalogue, plan)
    for group in study.groups:
        group_propensity(study, group)
    return study.plan


def _check_rounding(catalogue: Catalogue, plan: Plan) -> None:
    """Refuse a rounding that the pictures could not be drawn on before hours are spent."""
    from twicetold.evidence.rounded import round_coordinates

    round_coordinates(catalogue, plan.report.round_degrees)


def _claim(out: Path | None, *, force: bool) -> AbstractContextManager[Claim | None]:
    """Claim a folder before the work starts, when one is wanted at all."""
    return nullcontext() if out is None else claimed(out, force=force)


def motif_run(
    path: Path,
    motif: str,
    plan: Plan,
    *,
    pool: Pool,
    as_json: bool = False,
    page: Path | None = None,
    force: bool = False,
    cache: bool = True,
    tell_long: Callable[[str], None] | None = None,
) -> str:
    """Test one motif and say what came out, as text or as one JSON object.

    ``tell_long`` hears of a long run before it begins.
    """
    from twicetold.catalogue import read_catalogue
    from twicetold.evidence import test_motif
    from twicetold.evidence.words import tell

    with _claim(page, force=force) as claim:
        catalogue = read_catalogue(path, rules_of(plan))
        if tell_long is not None and _large(catalogue):
            _forewarn(catalogue, plan, pool, tell_long, motif)
        ranking = test_motif(catalogue, motif, plan, pool=pool, cache=cache)
        evidence = ranking.evidence[0]
        record = evidence_record(ranking, evidence)
        if claim is not None:
            from twicetold.report import write_pages

            command = f"twicetold test {path.name} {_quoted(evidence.motif_id)} --plan plan.toml"
            with claim.filled() as part:
                write_text(part / "test.json", json_text(record))
                write_text(part / "plan.toml", ranking.plan.to_toml())
                write_pages(ranking, part, command={"test": command})
        return json_text(record).rstrip("\n") if as_json else tell(ranking, evidence)


def rank_run(
    path: Path,
    out: Path,
    plan: Plan,
    *,
    pool: Pool,
    by: str = "evidence",
    without: tuple[str, ...] = (),
    force: bool = False,
    cache: bool = True,
    tell: Callable[[str], None] | None = None,
) -> str:
    """Rank a catalogue and write its folder; give what to print. ``tell`` hears of a long run."""
    from twicetold.catalogue import read_catalogue
    from twicetold.evidence import rank_catalogue
    from twicetold.evidence.ranking import check_order

    check_order(by)
    with claimed(out, force=force) as claim:
        clock = [time.perf_counter()]
        catalogue = read_catalogue(path, rules_of(plan))
        _check_rounding(catalogue, plan)
        if tell is not None:
            _forewarn(catalogue, plan, pool, tell)
        clock.append(time.perf_counter())
        moved = None
        if without:
            from twicetold.evidence.withdrawal import rank_without

            ranking, moved = rank_without(catalogue, plan, without, pool=pool, by=by, cache=cache)
        else:
            ranking = rank_catalogue(catalogue, plan, pool=pool, by=by, cache=cache)
        clock.append(time.perf_counter())
        with claim.filled() as part:
            _write_run(ranking, part, path=path, by=by, moved=moved)
            clock.append(time.perf_counter())
            seconds = [round(b - a, 3) for a, b in itertools.pairwise(clock)]
            timings = dict(zip(("read", "compute", "write"), seconds, strict=True))
            write_text(part / "timings.json", json_text({"seconds": timings}))
        return _said(ranking, out, seconds, moved)


def _large(catalogue: Catalogue) -> bool:
    """Whether one motif may take minutes: only then is an estimate worth its second."""
    return catalogue.n_traditions > LARGE or int(catalogue.attested.sum(axis=1).max()) > LARGE // 4


def _forewarn(
    catalogue: Catalogue,
    plan: Plan,
    pool: Pool,
    tell: Callable[[str], None],
    motif: str | None = None,
) -> None:
    """Say before a long run what it will take."""
    from twicetold.evidence.cost import forewarning
    from twicetold.evidence.study import prepare

    only = None if motif is None else [catalogue.find_motif(motif)]
    said = forewarning(prepare(catalogue, plan, motifs=only), pool)
    if said:
        tell(said)


def _write_run(ranking: Ranking, folder: Path, *, path: Path, by: str, moved: Any) -> None:
    """Fill a run's folder: table, plan, record, the catalogue as used, tables, pages."""
    from twicetold.catalogue import write_catalogue
    from twicetold.report import write_pages
    from twicetold.report.supplement import keep_figures

    write_csv(ranking.motifs, folder / "motifs.csv")
    write_text(folder / "plan.toml", ranking.plan.to_toml())
    write_text(folder / "run.json", json_text(run_record(ranking, by=by)))
    write_catalogue(ranking.catalogue, folder / "catalogue")
    tables = run_tables(ranking)
    if moved is not None:
        tables["moved"] = moved
    if tables:
        (folder / "tables").mkdir()
    for name, frame in tables.items():
        write_csv(frame, folder / "tables" / f"{name}.csv")
    write_csv(contacts_frame(ranking), folder / "contacts.csv")
    keep_figures(ranking, folder / "figures")
    command = f"twicetold rank {_quoted(path.name)} --plan plan.toml --out RUN"
    if by != "evidence":
        command += f" --by {by}"
    write_pages(ranking, folder, command={"rank": command, "catalogue": path.name})


def _said(ranking: Ranking, out: Path, seconds: list[float], moved: Any) -> str:
    """Say what a run found, in a few lines."""
    from twicetold.evidence.verdict import VERDICTS

    counts = ranking.motifs["verdict"].value_counts()
    lines = []
    if ranking.catalogue.notice:
        lines.append(ranking.catalogue.notice)
    lines.append(
        f"{len(ranking.motifs):,} motifs over {ranking.catalogue.n_traditions:,} traditions, "
        f"{seconds[1]:.1f} s to compute, {seconds[2]:.1f} s to write."
    )
    lines += [f"  {int(counts.get(v, 0)):>7,}  {v}" for v in VERDICTS]
    lines += [f"Note: {note}" for note in ranking.notes]
    if moved is not None:
        changed = int((moved["verdict"] != moved["verdict_with"]).sum())
        lines.append(
            f"Without the withdrawn traditions {changed:,} verdicts moved (tables/moved.csv)."
        )
    lines.append(f"Open {out / 'index.html'}")
    return "\n".join(lines)


def power_run(
    path: Path, plan: Plan, *, out: Path | None, pool: Pool, force: bool, cache: bool
) -> str:
    """Say what the traditions could show; optionally write the table and its picture."""
    from twicetold.catalogue import read_catalogue
    from twicetold.evidence.power import catalogue_power
    from twicetold.evidence.words import tell_power

    with _claim(out, force=force) as claim:
        catalogue = read_catalogue(path, rules_of(plan))
        table = catalogue_power(catalogue, plan, pool=pool, cache=cache)
        if claim is not None:
            from twicetold.report import write_power

            with claim.filled() as part:
                write_csv(table.frame, part / "power.csv")
                write_power(table, part, notice=catalogue.notice)
        return tell_power(table)


def supplement_run(
    run: Path, out: Path, *, cldf: bool, force: bool, pool: Pool, rounded: bool = True
) -> str:
    """Write the deposit of a run, and say whether verdicts move on the rounded coordinates."""
    from twicetold.report.supplement import read_run, write_supplement

    with claimed(out, force=force) as claim:
        moved = None
        if rounded:
            moved = rounded_again(read_run(run), pool)
        with claim.filled() as part:
            names = write_supplement(run, part, cldf=cldf, rounded=moved)
    lines = [f"Wrote {len(names)} files to {out}."]
    if moved is not None:
        others = int((moved["moved"] == "yes").sum())
        noun = "verdict moves" if others == 1 else "verdicts move"
        lines.append(f"On the rounded coordinates {others:,} {noun} (S4_rounded.csv).")
    return "\n".join([*lines, f"Next: twicetold verify {_quoted(str(out))}"])


def rounded_again(run: Run, pool: Pool) -> pd.DataFrame | None:
    """Rank a run's catalogue again on rounded coordinates; None where they are not rounded."""
    import pandas as pd

    from twicetold.evidence.rounded import rerun_rounded

    if run.plan.report.round_degrees <= 0:
        return None
    before = pd.DataFrame(run.motifs[1], columns=list(run.motifs[0]))
    return rerun_rounded(run.catalogue, run.plan, before, pool=pool)


def verify_run(deposit: Path, *, pool: Pool) -> tuple[bool, list[str]]:
    """Compute a deposit's tables again; say whether they agree, and where they do not."""
    from twicetold.verify import verify_deposit

    return verify_deposit(deposit, pool=pool)


def _quoted(words: str) -> str:
    import shlex

    return shlex.quote(words)
