"""The commands, and what becomes of errors."""

import os
import sys
import traceback
from pathlib import Path
from typing import Annotated

import typer

from waveassay.contract.errors import WaveassayError

app = typer.Typer(
    name="waveassay",
    help="Spectral analysis of physiologic recordings from checked recipes, with provenance. "
    "A research tool: never for monitoring or for decisions about a patient.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    context_settings={"help_option_names": ["-h", "--help"]},
)

_RECORDINGS = typer.Argument(
    help="Recordings (EDF, EDF+, BDF, BDF+), or folders that hold them at any depth.",
    show_default=False,
)
Recordings = Annotated[list[Path] | None, _RECORDINGS]


def _print_version(asked: bool) -> None:
    if asked:
        from importlib.metadata import version

        typer.echo(f"waveassay {version('waveassay')}")
        raise typer.Exit


@app.callback()
def _options(
    version: Annotated[
        bool,
        typer.Option(
            "--version", callback=_print_version, is_eager=True, help="Show the version and exit."
        ),
    ] = False,
) -> None:
    """Take what stands before the command."""


@app.command("run")
def run_command(
    target: Annotated[
        str,
        typer.Argument(
            metavar="RECIPE|WORKDIR",
            help="A recipe: its path, or the name of a shipped one. Or a working directory that "
            "holds recipe.yaml and recordings/, with nothing after it.",
        ),
    ],
    recordings: Recordings = None,
    into: Annotated[
        Path | None,
        typer.Option(help="Folder that gets runs/ and store/. Needed unless WORKDIR is given."),
    ] = None,
    workers: Annotated[
        int | None,
        typer.Option(
            min=1,
            help="Processes at work. Default: one a core. With --cluster: jobs at once.",
        ),
    ] = None,
    store: Annotated[
        Path | None, typer.Option(help="Folder of stored results. Default: store/ beside runs/.")
    ] = None,
    cluster: Annotated[
        Path | None,
        typer.Option(
            metavar="DIR",
            help="Run on a cluster: a Snakemake profile (a folder with config.yaml), or 'slurm', "
            "which ships. Recordings and results must be on a disk that every node sees.",
        ),
    ] = None,
    cluster_wait: Annotated[
        float,
        typer.Option(
            metavar="HOURS",
            min=0.01,
            help="Stop when no job has begun or ended on the cluster for so many hours.",
        ),
    ] = 24.0,
) -> None:
    """Run a recipe over recordings: tables, figures and provenance in a run folder.

    A recording that fails is named and the others go on. A run that was cut off goes on where it
    was when the same command is given again.
    """
    from waveassay.execute.snakemake import warming

    if cluster is None:
        warming.start()  # what workers need is loaded while all that follows is imported
    try:
        from waveassay.cli.run import run

        code = run(target, recordings or [], into, workers, store, cluster, cluster_wait)
    finally:
        warming.end()
    _leave(code)


@app.command("check")
def check_command(
    recipe: Annotated[
        str,
        typer.Argument(
            metavar="RECIPE|WORKDIR",
            help="A recipe: its path, or a shipped one's name. Or a working directory.",
        ),
    ],
    recordings: Recordings = None,
    plan: Annotated[
        bool,
        typer.Option(
            "--plan", help="Say which steps run as one frequency response, and why others do not."
        ),
    ] = False,
) -> None:
    """Check a recipe, alone or against recordings, before anything is computed."""
    from waveassay.cli.check import check

    _leave(check(recipe, recordings or [], plan=plan))


@app.command("describe")
def describe_command(
    recordings: Annotated[list[Path], _RECORDINGS],
) -> None:
    """Say what recordings hold: signals, units, rates, gaps, annotations, and what is odd."""
    from waveassay.cli.describe import describe

    _leave(describe(recordings))


@app.command("stages")
def stages_command(
    name: Annotated[str | None, typer.Argument(help="One stage, in full.")] = None,
) -> None:
    """List the installed stages, or show one: parameters, units, defaults, source."""
    from waveassay.cli.stages import show_stages

    _leave(show_stages(name))


@app.command("recipes")
def recipes_command(
    name: Annotated[str | None, typer.Argument(help="One recipe, in full.")] = None,
    copy: Annotated[
        Path | None, typer.Option(help="Write the recipe to this new file, to edit it.")
    ] = None,
) -> None:
    """List the recipes that ship, show one, or copy one out to edit."""
    from waveassay.cli.recipes import show_recipes

    _leave(show_recipes(name, copy))


@app.command("schema")
def schema_command() -> None:
    """Print the recipe grammar as JSON Schema, for editors that complete and check YAML."""
    from waveassay.cli.schema import print_schema

    _leave(print_schema())


@app.command("example")
def example_command(
    folder: Annotated[Path, typer.Argument(metavar="DIR", help="A folder that is not there yet.")],
) -> None:
    """Write a working directory with simulated recordings, to try."""
    from waveassay.cli.example import write

    _leave(write(folder))


def _leave(code: int) -> None:
    if code:
        raise typer.Exit(code)


def main() -> None:
    """Run the command line."""
    try:
        app()
    except WaveassayError as error:
        sys.stderr.write(f"{error}\n")
        sys.exit(error.exit_code)
    except BrokenPipeError:  # the reader of our output has gone, as `head` does
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        sys.exit(0)
    except Exception:  # our own fault: say so, and keep what tells why
        traceback.print_exc()
        sys.stderr.write(
            "\nThis is a fault of waveassay, not of your files. Please report it with the lines "
            "above.\n"
        )
        sys.exit(1)
