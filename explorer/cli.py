"""Command line: words in, one call to the floors below, text or files out; heavy imports stand inside commands."""

from __future__ import annotations

import contextlib
import io
import sys
import traceback
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
    """The group of commands: turns every error into a short message and an exit status."""

    def parse_args(self, ctx: click.Context, args: list[str]) -> list[str]:
        """Take --debug anywhere, for it is added when a command has just failed."""
        return super().parse_args(ctx, sorted(args, key=lambda word: word != "--debug"))

    def invoke(self, ctx: click.Context) -> Any:
        """Run a command; ExplorerError ends with its own status, Ctrl-C and what nobody foresaw with 3."""
        try:
            return super().invoke(ctx)
        except KeyboardInterrupt:
            click.echo("\nInterrupted. What was finished stays; the same command goes on from there.", err=True)
            ctx.exit(IncompleteError.exit_status)
        except (click.ClickException, click.exceptions.Exit, click.Abort, BrokenPipeError):
            raise
        except Exception as error:
            if ctx.params.get("debug"):
                traceback.print_exc()
            click.echo(described(error), err=True)
            ctx.exit(getattr(error, "exit_status", IncompleteError.exit_status))


@click.group(cls=Commands, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.option("--debug", is_flag=True, help="Show the traceback of an error.")
@click.version_option(__version__, prog_name="explorer")
def main(debug: bool) -> None:
    """Where every requirement on a sampled control loop holds: gain × sample period × plant tolerances.

    Exit status: 0 done; 1 the answer is no (--strict); 2 the input is wrong; 3 not completed, what was computed
    stays.
    """
    for stream in (sys.stdout, sys.stderr):  # a terminal without “ or µ shows a question mark
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="replace")


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
    with waiting("A short trial of the sweep; the first one on a machine compiles its kernels"):
        facts = understood(read, *estimate(read))
    click.echo(as_json(facts) if as_data else echo(read, facts))


@main.command()
@STUDY
@click.option("--out", metavar="DIR", help="Folder of the run [default: outputs/<stem of STUDY>].")
@click.option("--jobs", type=int, default=-1, show_default=True, help="Worker threads; -1: one per core.")
@click.option("--cluster", metavar="ADDRESS", help="Let the workers of a running Dask cluster compute the tiles.")
@click.option("--fresh", is_flag=True, help="Start over instead of continuing or reusing a run.")
@click.option("--strict", is_flag=True, help="Exit with status 1 when nothing is feasible.")
def sweep(
    study: Path, out: str | None, jobs: int, cluster: str | None, fresh: bool, strict: bool
) -> None:
    """Compute a study: writes sweep.nc, verdict.nc, decision.json and pictures, prints the answer."""
    from explorer import read_study
    from explorer import sweep as swept
    from explorer.views.folder import write_answer

    if out == "":  # from an unset variable; it would mean the folder one stands in
        raise OptionError("--out: found nothing; allowed: a folder")
    read = read_study(study)
    folder = Path("outputs") / study.stem if out is None else Path(out)
    with progress_line(read.title) as report:
        dataset = swept(read, out=folder, jobs=jobs, fresh=fresh, progress=report, cluster=cluster)
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

    click.echo(draw(folder, show, tolerance_scale, pairs(place, "--at"), kind))


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
        say(f"Limits: {'; '.join(decision['limits'].splitlines())}.")
    end(strict and not decision["feasible"])


@main.command()
@STUDY
@click.option("--at", "place", multiple=True, metavar="NAME=VALUE[,NAME=VALUE...]", help="The design point.")
@click.option("--out", metavar="DIR", help="Folder of the pictures [default: outputs/<stem of STUDY>-probe].")
@JSON
@click.option("--strict", is_flag=True, help="Exit with status 1 when a requirement is missed or unknown.")
def probe(study: Path, place: tuple[str, ...], out: str | None, as_data: bool, strict: bool) -> None:
    """One design point in every scenario: requirements, worst plants, poles, responses, loop gain, three pictures.

    Scenario 0 is the nominal plant; the worst is that of the scenarios within the tolerances as stated, and so is
    what --strict goes by. With --json pictures are drawn only into a stated --out.
    """
    from explorer import probe as probed_at
    from explorer import read_study
    from explorer.views.probe_folder import probe_folder, write_pictures
    from explorer.views.probe_text import document, probe_text
    from explorer.views.probed import judged

    folder, words = probe_folder(study, out), tuple(part for word in place for part in word.split(","))
    found = judged(probed_at(read_study(study), pairs(words, "--at")))
    click.echo(document(found) if as_data else probe_text(found))
    if out or not as_data:
        written = write_pictures(folder, found.dataset)
        click.echo(f"\nWritten to {folder}/: {', '.join(path.name for path in written)}", err=as_data)
    end(strict and not found.met)


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
    """NAME=VALUE words as a mapping, split at the last = because names may hold one; OptionError for other forms."""
    found: dict[str, str] = {}
    for word in words:
        name, _, value = (part.strip() for part in word.rpartition("="))
        if not (name and value):
            raise OptionError(f"{option}: found {word!r}; allowed: NAME=VALUE")
        if name in found:
            raise OptionError(f"{option}: {name!r} stands twice; allowed: one value for each name")
        found[name] = value
    return found


def described(error: Exception) -> str:
    """The message of an error for people who do not read tracebacks."""
    if isinstance(error, ExplorerError):
        return str(error)
    if isinstance(error, MemoryError):
        return "Out of memory. Sweep fewer points at once, or with fewer --jobs."
    if isinstance(error, OSError):
        return f"{error.filename or 'output'}: {error.strerror or error}"
    return f"Failed with {type(error).__name__}: {error}. This is a fault of explorer; --debug shows where."


@contextlib.contextmanager
def waiting(text: str) -> Iterator[None]:
    """Say on stderr what takes a moment; silent when stderr is no terminal."""
    from rich.console import Console

    console = Console(stderr=True)
    if not sys.stderr.isatty():
        yield
        return
    with console.status(text):
        yield


@contextlib.contextmanager
def progress_line(title: str) -> Iterator[Callable[[int, int], None]]:
    """A progress bar with the time left on stderr; silent when stderr is no terminal."""
    from rich import progress as parts
    from rich.console import Console
    from rich.markup import escape

    console = Console(stderr=True)
    columns = (parts.TextColumn("{task.description}"), parts.BarColumn(), parts.MofNCompleteColumn(),
               parts.TextColumn("tiles"), parts.TimeElapsedColumn(), parts.TextColumn("left"),
               parts.TimeRemainingColumn())  # fmt: skip
    with parts.Progress(*columns, console=console, disable=not sys.stderr.isatty(), transient=True) as progress:
        task = progress.add_task(escape(title[:40]), total=None)
        yield lambda done, total: progress.update(task, completed=done, total=total)
