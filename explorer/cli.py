"""Command line: words in, one call to the floors below, text or files out; heavy imports stand inside commands."""

from __future__ import annotations

import contextlib
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import click

from explorer import __version__
from explorer.errors import ExplorerError, IncompleteError, OptionError

STUDY = click.argument("study", type=click.Path(path_type=Path))
FOLDER = click.argument("folder", metavar="DIR", type=click.Path(path_type=Path))
JSON = click.option(
    "--json", "as_data", is_flag=True, help="Print one JSON document and nothing else on stdout."
)


class Commands(click.Group):
    """The group of commands: turns every error a user can cause into a short message and an exit status."""

    def invoke(self, ctx: click.Context) -> Any:
        """Run a command; ExplorerError ends with its own status, Ctrl-C with 3."""
        try:
            return super().invoke(ctx)
        except ExplorerError as error:
            if ctx.params.get("debug"):
                raise
            click.echo(str(error), err=True)
            ctx.exit(error.exit_status)
        except KeyboardInterrupt:
            click.echo("\nInterrupted. Finished tiles stay; the same command goes on from there.", err=True)
            ctx.exit(IncompleteError.exit_status)


@click.group(cls=Commands, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.option("--debug", is_flag=True, help="Show the traceback of an error.")
@click.version_option(__version__, prog_name="explorer")
def main(debug: bool) -> None:
    """Where every requirement on a sampled control loop holds: gain × sample period × plant tolerances.

    Exit status: 0 done; 1 the answer is no (--strict); 2 the input is wrong; 3 not completed, what was computed
    stays.
    """


@main.command()
@STUDY
@JSON
def check(study: Path, as_data: bool) -> None:
    """Read a study and say how it was understood, and what its sweep will take."""
    from explorer import read_study
    from explorer.sweeping.estimate import estimate
    from explorer.views.echo import echo, understood
    from explorer.views.plain import as_json

    read = read_study(study)
    facts = understood(read, *estimate(read))
    click.echo(as_json(facts) if as_data else echo(read, facts))


@main.command()
@STUDY
@click.option(
    "--out", type=click.Path(path_type=Path), help="Folder of the run [default: outputs/<stem of STUDY>]."
)
@click.option("--jobs", type=int, default=-1, show_default=True, help="Worker threads; -1: one per core.")
@click.option("--fresh", is_flag=True, help="Start over instead of continuing or reusing a run.")
@click.option("--strict", is_flag=True, help="Exit with status 1 when nothing is feasible.")
def sweep(study: Path, out: Path | None, jobs: int, fresh: bool, strict: bool) -> None:
    """Compute a study: writes sweep.nc, verdict.nc, decision.json and pictures, prints the answer."""
    from explorer import read_study
    from explorer import sweep as swept
    from explorer.views.folder import write_answer

    read = read_study(study)
    folder = out or Path("outputs") / study.stem
    with progress_line(read.title) as report:
        dataset = swept(read, out=folder, jobs=jobs, fresh=fresh, progress=report)
    run = write_answer(folder, dataset)
    say(run.decision["answer"])
    click.echo(f"\nWritten to {folder}/: sweep.nc, verdict.nc, decision.json, region.png, slack.png")
    end(strict and not run.decision["feasible"])


@main.command()
@FOLDER
@click.option(
    "--limit", "limits", multiple=True, metavar="NAME=VALUE", help='Another limit, e.g. "time to peak=90 ms".'
)
@JSON
@click.option("--strict", is_flag=True, help="Exit with status 1 when nothing is feasible.")
def judge(folder: Path, limits: tuple[str, ...], as_data: bool, strict: bool) -> None:
    """Judge a run again with other limits, without sweeping again; rewrites verdict.nc and what follows from it."""
    from explorer.views.folder import read_sweep, write_answer
    from explorer.views.plain import as_json, summary_text, verdict_summary

    run = write_answer(folder, read_sweep(folder), pairs(limits, "--limit"))
    summary = verdict_summary(run.verdict) | {"answer": run.decision["answer"]}
    if as_data:
        click.echo(as_json(summary))
    else:
        click.echo(summary_text(summary) + "\n")
        say(run.decision["answer"])
    end(strict and not run.decision["feasible"])


@main.command("map")
@FOLDER
@click.option("--show", metavar="slack|binding|share|REQUIREMENT", help="One field instead of the region.")
@click.option(
    "--tolerance-scale", type=float, default=1.0, show_default=True, help="One of the scales swept."
)
@click.option(
    "--at", "place", multiple=True, metavar="NAME=VALUE", help="Value of a further design variable."
)
@click.option("--format", "kind", type=click.Choice(["png", "svg", "pdf"]), default="png", show_default=True)
def draw_map(
    folder: Path, show: str | None, tolerance_scale: float, place: tuple[str, ...], kind: str
) -> None:
    """Draw one region picture into the run's folder."""
    from explorer.views.folder import draw

    design = {name: number(name, value) for name, value in pairs(place, "--at").items()}
    click.echo(draw(folder, show, tolerance_scale, design, kind))


@main.command()
@FOLDER
@JSON
@click.option("--strict", is_flag=True, help="Exit with status 1 when nothing is feasible.")
def decide(folder: Path, as_data: bool, strict: bool) -> None:
    """The decision of a run: slowest period, gain window, what stops it, recommended design."""
    from explorer.views.folder import read_run
    from explorer.views.plain import as_json

    decision = read_run(folder).decision
    if as_data:
        click.echo(as_json(decision))
    else:
        say(decision["answer"])
    end(strict and not decision["feasible"])


@main.command()
@JSON
def measures(as_data: bool) -> None:
    """Every measure a requirement may name: unit, basis, definition, source."""
    from dataclasses import asdict

    from explorer.measures.catalogue import CATALOGUE
    from explorer.views.plain import as_json

    if as_data:
        click.echo(as_json([asdict(measure) for measure in CATALOGUE]))
        return
    for measure in CATALOGUE:
        basis = f'  basis = "{measure.basis}"' if measure.basis else ""
        click.secho(f"{measure.name} [{measure.unit}]{basis}", bold=True)
        say(measure.definition, indent=4)
        say(f"Source: {measure.source}", indent=4)


def say(text: str, indent: int = 0) -> None:
    """Print a paragraph, wrapped for a terminal."""
    click.echo(click.wrap_text(text, width=96, initial_indent=" " * indent, subsequent_indent=" " * indent))


def end(no: bool) -> None:
    """End with status 1 when the answer is no and that was to be told."""
    if no:
        click.get_current_context().exit(1)


def pairs(words: tuple[str, ...], option: str) -> dict[str, str]:
    """NAME=VALUE words as a mapping; OptionError for any other form."""
    for word in words:
        name, sign, value = word.partition("=")
        if not (sign and name.strip() and value.strip()):
            raise OptionError(f"{option}: found {word!r}; allowed: NAME=VALUE")
    parts = [word.partition("=") for word in words]
    return {name.strip(): value.strip() for name, _, value in parts}


def number(name: str, value: str) -> float:
    """A number or quantity in SI; OptionError with the reason otherwise."""
    from explorer.study.quantities import QuantityError, read_quantity

    try:
        return read_quantity(value).value
    except QuantityError as error:
        raise OptionError(f"{name}: {error}") from None


@contextlib.contextmanager
def progress_line(title: str) -> Iterator[Callable[[int, int], None]]:
    """A progress bar with the time left on stderr; silent when stderr is no terminal."""
    from rich.console import Console
    from rich.markup import escape
    from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn, TimeRemainingColumn

    console = Console(stderr=True)
    columns = (TextColumn("{task.description}"), BarColumn(), TextColumn("{task.completed}/{task.total} tiles"),
               TimeElapsedColumn(), TextColumn("left"), TimeRemainingColumn())  # fmt: skip
    with Progress(*columns, console=console, disable=not sys.stderr.isatty(), transient=True) as progress:
        task = progress.add_task(escape(title[:40]), total=None)
        yield lambda done, total: progress.update(task, completed=done, total=total)
