"""Commands and their help; each is a thin shell around `stillground.pipeline`."""

from __future__ import annotations

import io
import json
import sys
from importlib.metadata import version
from pathlib import Path
from typing import Annotated

import typer

from stillground.errors import StillgroundError

app = typer.Typer(
    add_completion=False,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    no_args_is_help=True,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
)

Configuration = Annotated[
    Path, typer.Argument(metavar="CONFIG", help="A TOML file, see 'stillground schema'.")
]
Settings = Annotated[
    list[str] | None,
    typer.Option("--set", metavar="KEY=VALUE", help="Override one setting; may be repeated."),
]
Out = Annotated[Path | None, typer.Option("--out", metavar="DIR", help="Where to write.")]


def _print_version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"stillground {version('stillground')}")
        raise typer.Exit


@app.callback()
def stillground(
    show: Annotated[
        bool, typer.Option("--version", help="Show the version.", callback=_print_version, is_eager=True)
    ] = False,
) -> None:
    """Ground sections from geophysical profiles, with the stop argued and the grid tried.

    A configuration names the survey's tables and says, in metres, how the ground is modelled. A run
    reconstructs each profile on finer and finer grids, stops by rule, and says whether the answer
    settles, drifts with the grid, or cannot be told.

    \b
    A first look, then the run:
      stillground inspect configs/osmere-weir-crosshole.toml
      stillground run configs/osmere-weir-crosshole.toml

    A reconstruction is no clearance to dig, drill or load: confirm it by direct investigation; local
    codes and licensed practice decide.
    """


@app.command()
def run(
    config: Configuration,
    out: Out = None,
    overrides: Settings = None,
    resume: Annotated[
        bool, typer.Option("--resume", help="Keep profiles already finished from the same inputs.")
    ] = False,
    strict: Annotated[
        bool, typer.Option("--strict", help="Exit with 3 unless the verdict is 'settled'.")
    ] = False,
    quiet: Annotated[bool, typer.Option("--quiet", help="Print nothing but errors.")] = False,
) -> None:
    """Reconstruct the survey of CONFIG and write its products.

    Prints, for every profile, where each stopping rule would stop and why, how the answer changed
    from grid to grid, and the verdict. Writes sections, histories, a map of depth slices, the
    survey's layers and curtains as NetCDF, the fit and points as CSV, figures, and summary.json.

    \b
    Examples:
      stillground run line.toml
      stillground run line.toml --out trial --set ground.spacing="0.5 m"
      stillground run line.toml --set stopping.choose=discrepancy --strict

    \b
    Exit codes: 0 done, 1 the machine failed, 2 bad input, 3 not settled (--strict), 130 interrupted
    (what was done by then is judged and written).
    """
    from stillground.cli import console, tables
    from stillground.config import load
    from stillground.pipeline.run import Begun, Done, output_folder
    from stillground.pipeline.run import run as work

    settings, text = load(config, overrides or ())
    folder = output_folder(settings, config, out)
    command = " ".join(["stillground run", config.name, *(f"--set {o}" for o in overrides or ())])
    if not quiet:
        console.heading(settings.title)
    outcome = console.follow(
        work(settings, text, folder, command=command, resume=resume),
        lambda event: tables.begun(event) if isinstance(event, Begun) else tables.profile(event),
        quiet=quiet,
        shown=(Begun, Done),
    )
    if not quiet:
        tables.closing(outcome)
    if outcome.interrupted:
        raise typer.Exit(130)
    if strict and outcome.summary["verdict"] != "settled":
        raise typer.Exit(3)


@app.command()
def inspect(config: Configuration, out: Out = None, overrides: Settings = None) -> None:
    """Read and judge the survey of CONFIG without reconstructing it.

    Prints counts, ranges, repeated and suspicious rows, the distance of positions off the section,
    the planned grids, and the memory and time that a run would take; draws the geometry, and times
    against distance where sources and receivers stand along the surface.

    \b
    Example:
      stillground inspect line.toml
    """
    from stillground.cli import console, tables
    from stillground.config import load
    from stillground.pipeline.inspect import draw
    from stillground.pipeline.inspect import inspect as work
    from stillground.pipeline.run import output_folder

    settings, _ = load(config, overrides or ())
    folder = output_folder(settings, config, out)
    console.heading(settings.title)
    for plan in work(settings):
        tables.plan(plan, draw(plan, settings, folder))


@app.command()
def rehearse(
    config: Configuration,
    out: Out = None,
    overrides: Settings = None,
    pattern: Annotated[
        bool, typer.Option("--pattern", help="Send checkerboards and single bodies through the survey.")
    ] = False,
) -> None:
    """Try all stopping rules on synthetic ground under the survey of CONFIG.

    Grounds are drawn from the prior, and as layers; where CONFIG describes a ground under [simulate],
    that too (where rays bend, if it explains the survey). Each goes through the survey's own geometry
    with its own errors. Prints what each rule costs over the best iterate: median, 90 %, worst; groups
    of rules that cannot be told apart; and which to choose.

    Writes the same numbers as <profile>_rehearsal.json, and a figure.

    With --pattern, prints and draws which sizes come back where, at the stop of the survey's own answer.

    \b
    Examples:
      stillground rehearse line.toml
      stillground rehearse line.toml --set rehearsal.twins=100
      stillground rehearse line.toml --pattern --set 'rehearsal.patterns=["2 m", "4 m"]'
    """
    from stillground.cli import console, tables
    from stillground.config import load
    from stillground.pipeline.rehearse import Patterns, Rehearsed, rehearse_all
    from stillground.pipeline.run import output_folder

    settings, text = load(config, overrides or ())
    folder = output_folder(settings, config, out)
    command = " ".join(["stillground rehearse", config.name, *(f"--set {o}" for o in overrides or ())])
    console.heading(settings.title)
    console.follow(
        rehearse_all(settings, text, folder, command=command, pattern=pattern),
        lambda found: tables.pattern(found) if isinstance(found, Patterns) else tables.rehearsal(found),
        quiet=False,
        shown=(Rehearsed, Patterns),
    )


@app.command()
def simulate(
    config: Configuration,
    overrides: Settings = None,
    replace: Annotated[bool, typer.Option("--replace", help="Write over an existing table.")] = False,
) -> None:
    """Compute a survey over the ground described in CONFIG and write its table.

    The table [simulate] describes a background with blobs, discs, layers and boxes, the noise, and
    where sources and receivers stand. Data come from closed forms, not from a grid; those of kind
    curved-ray, which have none, from a march through the ground on a fine grid of its own. The same
    configuration gives the same table to the byte. The table goes to simulate.output.

    \b
    Example:
      stillground simulate configs/osmere-weir-crosshole.toml --replace
    """
    from stillground.cli import console
    from stillground.config import load
    from stillground.pipeline.simulate import simulate as work

    settings, _ = load(config, overrides or ())
    path, n_data = work(settings, replace=replace)
    console.say(f"{path}: {n_data} data over the described ground (invented)")


@app.command()
def report(
    folder: Annotated[Path, typer.Argument(metavar="FOLDER", help="Results of a run.")],
    other: Annotated[
        Path | None, typer.Argument(metavar="OTHER", help="Results of another run, to compare.")
    ] = None,
    out: Out = None,
) -> None:
    """Make report.html of the results in FOLDER, from its files alone.

    Nothing is run again: the folder may have come by mail. The page needs no network, and prints. With
    OTHER, two results of one line stand side by side with their difference: profiles of equal name,
    over the ground that both have; such a page goes to results/comparison unless --out says where.

    \b
    Examples:
      stillground report results/osmere-weir-crosshole
      stillground report results/first results/second --out comparison
    """
    from stillground.cli import console
    from stillground.products.report import write_comparison, write_report

    if other is None:
        console.say(str(write_report(folder, out)))
    else:
        console.say(str(write_comparison(folder, other, out or Path("results") / "comparison")))


@app.command()
def plugins() -> None:
    """List kinds of measurement, solvers and stopping rules, with where each comes from."""
    from stillground.cli import tables

    tables.plugins()


@app.command()
def schema() -> None:
    """Print the JSON Schema of the configuration, for editors that complete and check."""
    from stillground.config import json_schema

    typer.echo(json.dumps(json_schema(), indent=2, ensure_ascii=False))


def main() -> None:
    """Runs the command line; an error becomes one message and an exit code."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="replace")
    try:
        app()
    except StillgroundError as error:
        typer.echo(f"stillground: {error}", err=True)
        sys.exit(2)
    except (OSError, MemoryError) as error:
        typer.echo(f"stillground: the machine failed: {error or type(error).__name__}", err=True)
        sys.exit(1)
