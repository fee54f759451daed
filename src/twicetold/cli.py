"""The commands. Each reads its words, calls one function and prints; no science is done here."""

from __future__ import annotations

import gc
import os
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer
from typer.core import TyperGroup

from twicetold.errors import CatalogueError, TwicetoldError
from twicetold.interrupt import unmissable

if TYPE_CHECKING:
    from twicetold.plan import Plan


class _Carried(BaseException):
    """Carries an interrupt or a fault of the system past typer, which would end on it silently."""

    def __init__(self, original: KeyboardInterrupt | OSError) -> None:
        self.original = original


class _Commands(TyperGroup):
    """The commands, all interrupts and faults of the system left to :func:`main`."""

    def invoke(self, ctx: Any) -> Any:
        """Run the command."""
        try:
            return super().invoke(ctx)
        except (KeyboardInterrupt, OSError) as err:
            raise _Carried(err) from err


app = typer.Typer(
    name="twicetold",
    cls=_Commands,
    help="Was the tale carried, or told twice? Tests every motif of a catalogue.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)

CatalogueArg = Annotated[
    Path, typer.Argument(help="Folder of tables, workbook (.xlsx) or CLDF metadata.")
]
PlanOpt = Annotated[
    Path | None, typer.Option("--plan", help="Analysis plan (TOML), or a run.json to repeat.")
]
GraphOpt = Annotated[str | None, typer.Option("--graph", help="Shorthand for graph.rule.")]
PropensityOpt = Annotated[
    str | None, typer.Option("--propensity", help="Shorthand for emergence.propensity.")
]
DrawsOpt = Annotated[int | None, typer.Option("--draws", help="Shorthand for evidence.draws.")]
WalksOpt = Annotated[int | None, typer.Option("--walks", help="Shorthand for evidence.walks.")]
SeedOpt = Annotated[int | None, typer.Option("--seed", help="Shorthand for evidence.seed.")]
WorldsOpt = Annotated[
    str | None, typer.Option("--worlds", help="Shorthand for evidence.worlds, comma-separated.")
]
WorkersOpt = Annotated[int | None, typer.Option("--workers", help="Threads; all by default.")]
ClusterOpt = Annotated[
    str | None, typer.Option("--cluster", help="Address of a dask.distributed scheduler.")
]
QuietOpt = Annotated[bool, typer.Option("--quiet", help="No progress, no remarks.")]
ForceOpt = Annotated[bool, typer.Option("--force", help="Replace an earlier run's folder.")]
NoCacheOpt = Annotated[bool, typer.Option("--no-cache", help="Neither read nor keep banks.")]


@app.callback(invoke_without_command=True)
def _root(
    version: Annotated[bool, typer.Option("--version", help="Print the version.")] = False,
) -> None:
    if version:
        from twicetold import __version__

        typer.echo(f"twicetold {__version__}")
        raise typer.Exit


@app.command()
def example(
    folder: Annotated[Path, typer.Argument(help="Folder to write; must not exist yet.")],
) -> None:
    """Write the demonstration catalogue: an invented archipelago, with its known truth."""
    from twicetold.run import write_demonstration

    written = write_demonstration(folder)
    typer.echo(f"Wrote the invented archipelago to {written}.")
    typer.echo(f"Next: twicetold check {folder}")


@app.command()
def check(
    catalogue: CatalogueArg,
    plan: PlanOpt = None,
    quiet: QuietOpt = False,
) -> None:
    """Say every problem in the tables, or "ready"."""
    from twicetold.run import check_tables

    ready, lines = check_tables(catalogue, _plan(plan))
    for line in lines:
        if not quiet or not ready:
            typer.echo(line, err=not ready)
    if not ready:
        raise typer.Exit(2)


@app.command()
def plan(
    catalogue: CatalogueArg,
    out: Annotated[Path | None, typer.Option("--out", help="File; the screen by default.")] = None,
    graph: GraphOpt = None,
    propensity: PropensityOpt = None,
    draws: DrawsOpt = None,
    walks: WalksOpt = None,
    seed: SeedOpt = None,
    worlds: WorldsOpt = None,
    force: Annotated[bool, typer.Option("--force", help="Replace an earlier plan file.")] = False,
) -> None:
    """Write the analysis plan as TOML, every choice spelled out (register it before you look)."""
    from twicetold.run import resolved_plan, write_text

    wanted = _plan(None, graph, propensity, draws, walks, seed, worlds)
    text = resolved_plan(catalogue, wanted).to_toml()
    if out is None:
        typer.echo(text, nl=False)
        return
    write_text(out, text, force=force)
    typer.echo(f"Wrote the plan to {out}.")


@app.command()
def test(
    catalogue: CatalogueArg,
    motif: Annotated[str, typer.Argument(help="Motif id, or its name.")],
    plan: PlanOpt = None,
    graph: GraphOpt = None,
    propensity: PropensityOpt = None,
    draws: DrawsOpt = None,
    walks: WalksOpt = None,
    seed: SeedOpt = None,
    worlds: WorldsOpt = None,
    as_json: Annotated[bool, typer.Option("--json", help="One JSON object to stdout.")] = False,
    page: Annotated[
        Path | None, typer.Option("--page", help="Folder for the motif's page; must not exist.")
    ] = None,
    workers: WorkersOpt = None,
    cluster: ClusterOpt = None,
    quiet: QuietOpt = False,
    force: ForceOpt = False,
    no_cache: NoCacheOpt = False,
) -> None:
    """Test one motif, by id or name."""
    from twicetold.run import motif_run

    wanted = _plan(plan, graph, propensity, draws, walks, seed, worlds)
    with _pool(workers, cluster, quiet or as_json) as pool:
        text = motif_run(
            catalogue,
            motif,
            wanted,
            pool=pool,
            as_json=as_json,
            page=page,
            force=force,
            cache=not no_cache,
            tell_long=None if quiet else lambda line: typer.echo(line, err=True),
        )
    typer.echo(text)


@app.command()
def rank(
    catalogue: CatalogueArg,
    out: Annotated[Path, typer.Option("--out", help="Folder for the run; must not exist.")],
    plan: PlanOpt = None,
    by: Annotated[
        str | None,
        typer.Option("--by", help="evidence, moran_i, joins_ratio, emergence_share or holders."),
    ] = None,
    graph: GraphOpt = None,
    propensity: PropensityOpt = None,
    draws: DrawsOpt = None,
    walks: WalksOpt = None,
    seed: SeedOpt = None,
    worlds: WorldsOpt = None,
    stability: Annotated[
        bool, typer.Option("--stability", help="Shorthand for sensitivity.stability = true.")
    ] = False,
    without: Annotated[
        list[str] | None,
        typer.Option("--without", help="Withdraw a tradition (repeatable); says what moved."),
    ] = None,
    workers: WorkersOpt = None,
    cluster: ClusterOpt = None,
    quiet: QuietOpt = False,
    force: ForceOpt = False,
    no_cache: NoCacheOpt = False,
) -> None:
    """Rank the whole catalogue and write its tables and pages."""
    from twicetold.plan import recorded_order
    from twicetold.run import rank_run

    # A run's record repeats the run, its order included.
    order = by or (recorded_order(plan) if plan else None) or "evidence"
    wanted = _plan(plan, graph, propensity, draws, walks, seed, worlds)
    if stability:
        wanted = wanted.replace(sensitivity__stability=True)
    with _pool(workers, cluster, quiet) as pool:
        said = rank_run(
            catalogue,
            out,
            wanted,
            by=order,
            without=tuple(without or ()),
            pool=pool,
            force=force,
            cache=not no_cache,
            tell=None if quiet else lambda line: typer.echo(line, err=True),
        )
    if not quiet:
        typer.echo(said)


@app.command()
def power(
    catalogue: CatalogueArg,
    plan: PlanOpt = None,
    out: Annotated[
        Path | None, typer.Option("--out", help="Folder for the table and the picture.")
    ] = None,
    graph: GraphOpt = None,
    propensity: PropensityOpt = None,
    draws: DrawsOpt = None,
    walks: WalksOpt = None,
    seed: SeedOpt = None,
    workers: WorkersOpt = None,
    cluster: ClusterOpt = None,
    quiet: QuietOpt = False,
    force: ForceOpt = False,
    no_cache: NoCacheOpt = False,
) -> None:
    """Say what these traditions could show at all, before any motif is looked at."""
    from twicetold.run import power_run

    wanted = _plan(plan, graph, propensity, draws, walks, seed, None)
    with _pool(workers, cluster, quiet) as pool:
        said = power_run(catalogue, wanted, out=out, pool=pool, force=force, cache=not no_cache)
    typer.echo(said)


@app.command()
def supplement(
    run: Annotated[Path, typer.Argument(help="Folder that rank wrote.")],
    out: Annotated[Path, typer.Option("--out", help="Folder for the deposit; must not exist.")],
    cldf: Annotated[bool, typer.Option("--cldf", help="Also a CLDF dataset of results.")] = False,
    rounded: Annotated[
        bool,
        typer.Option(
            "--rounded/--no-rounded",
            help="Rank again on the rounded coordinates and say which verdicts move.",
        ),
    ] = True,
    workers: WorkersOpt = None,
    cluster: ClusterOpt = None,
    quiet: QuietOpt = False,
    force: ForceOpt = False,
) -> None:
    """Write the journal tables of a run."""
    from twicetold.run import supplement_run

    with _pool(workers, cluster, quiet) as pool:
        said = supplement_run(run, out, cldf=cldf, force=force, pool=pool, rounded=rounded)
    if not quiet:
        typer.echo(said)


@app.command()
def verify(
    deposit: Annotated[Path, typer.Argument(help="Folder that supplement wrote.")],
    workers: WorkersOpt = None,
    cluster: ClusterOpt = None,
    quiet: QuietOpt = False,
) -> None:
    """Compute the tables again from a deposit and say whether they agree to the last digit."""
    from twicetold.run import verify_run

    with _pool(workers, cluster, quiet) as pool:
        agrees, lines = verify_run(deposit, pool=pool)
    for line in lines:
        typer.echo(line, err=not agrees)
    if not agrees:
        raise typer.Exit(2)


def _plan(
    path: Path | None,
    graph: str | None = None,
    propensity: str | None = None,
    draws: int | None = None,
    walks: int | None = None,
    seed: int | None = None,
    worlds: str | None = None,
) -> Plan:
    """Read the plan and lay the shorthands over it."""
    from twicetold.plan import Plan, read_plan

    base = Plan() if path is None else read_plan(path)
    changes: dict[str, Any] = {
        "graph__rule": graph,
        "emergence__propensity": propensity,
        "evidence__draws": draws,
        "evidence__walks": walks,
        "evidence__seed": seed,
        "evidence__worlds": None
        if worlds is None
        else tuple(w.strip() for w in worlds.split(",") if w.strip()),
    }
    given = {name: value for name, value in changes.items() if value is not None}
    return base.replace(**given) if given else base


def _pool(workers: int | None, cluster: str | None, quiet: bool) -> Any:
    from twicetold.progress import open_pool

    return open_pool(workers=workers, cluster=cluster, quiet=quiet)


def _run() -> None:
    try:
        with unmissable():
            app()
    except _Carried as carried:
        raise carried.original from None


def main() -> None:
    """Run the command line; every error a user can meet is one plain message."""
    # Libraries make objects by the hundred thousand as they load, and nearly all of them stay:
    # looking through them for garbage every 700 objects takes a twentieth of a short command.
    gc.set_threshold(50_000, *gc.get_threshold()[1:])
    try:
        _run()
    except CatalogueError as err:
        noun = "problem" if len(err.problems) == 1 else "problems"
        print(f"twicetold: {len(err.problems)} {noun} in the catalogue:", file=sys.stderr)
        print(err, file=sys.stderr)
        sys.exit(2)
    except TwicetoldError as err:
        print(f"twicetold: {err}", file=sys.stderr)
        sys.exit(2)
    except KeyboardInterrupt:
        print("twicetold: interrupted; nothing half-written was left.", file=sys.stderr)
        sys.stderr.flush()
        # Everything is cleaned up by now. A plain exit would end by the signal instead of with 130
        # where the interrupt struck code made from text (dataclasses, kernels), as Python does.
        os._exit(130)
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        sys.exit(0)
    except OSError as err:
        where = f" ({err.filename})" if err.filename else ""
        print(f"twicetold: {err.strerror or err}{where}.", file=sys.stderr)
        sys.exit(2)
    except MemoryError:
        print("twicetold: this machine has too little memory for that.", file=sys.stderr)
        sys.exit(2)
    except Exception as err:
        if os.environ.get("TWICETOLD_DEBUG"):
            raise
        print(
            f"twicetold: a fault of the program, not of your tables: {type(err).__name__}: {err}\n"
            "Please report it; TWICETOLD_DEBUG=1 shows where it happened.",
            file=sys.stderr,
        )
        sys.exit(1)


if __name__ == "__main__":
    main()
