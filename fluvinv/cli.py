"""The command line: verbs that parse, call the pipeline and map errors to exit codes."""

import os
import signal
import sys
import traceback
import warnings
from pathlib import Path
from typing import Annotated

import typer

from fluvinv.errors import FluvinvError, OutputError

#: What the parser raises on a wrong command line; typer exports only this class's child.
UsageError = typer.BadParameter.__base__
INTERRUPTED = 130

app = typer.Typer(
    add_completion=False,
    pretty_exceptions_enable=False,
    help="Histories of rock uplift, with their uncertainty, from the river profiles of a digital elevation model.",
)

SettingsPath = Annotated[Path, typer.Argument(metavar="SETTINGS", help="Settings file (YAML).")]
OutputOption = Annotated[Path | None, typer.Option("--output", metavar="DIR", help="Folder to write to.")]
OverwriteOption = Annotated[
    bool, typer.Option("--overwrite", help="Replace other results of fluvinv that stand there.")
]
VerboseOption = Annotated[bool, typer.Option("-v", "--verbose", help="Name every step; show tracebacks of errors.")]
QuietOption = Annotated[bool, typer.Option("-q", "--quiet", help="No progress, no warnings, no summary: errors alone.")]


def _show_version(wanted: bool) -> None:
    if wanted:
        from fluvinv import __version__

        print(f"fluvinv {__version__}")
        raise typer.Exit


@app.callback()
def _verbs(
    _version: Annotated[
        bool, typer.Option("--version", callback=_show_version, is_eager=True, help="Print the version and stop.")
    ] = False,
) -> None:
    """Histories of rock uplift, with their uncertainty, from the river profiles of a digital elevation model."""


def _finish(outcome, quiet: bool) -> None:
    """Print the summary to stdout and the warnings to stderr."""
    if quiet:
        return
    for warning in outcome.warnings:
        print(f"Warning: {warning}", file=sys.stderr)
    try:
        print("\n".join(outcome.lines), flush=True)
    except OSError as error:
        # Python flushes once more when it ends, and that must not fail again.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        raise OutputError(f"the summary cannot be written to stdout ({error.strerror}); the rest is done.") from error


@app.command()
def start(
    dem: Annotated[Path, typer.Argument(metavar="DEM", help="Digital elevation model (GeoTIFF or another raster).")],
    output: OutputOption = None,
    overwrite: Annotated[bool, typer.Option("--overwrite", help="Replace a settings file that stands there.")] = False,
    verbose: VerboseOption = False,
    quiet: QuietOption = False,
) -> None:
    """Write a commented settings file with first guesses for this DEM."""
    from fluvinv import beginning

    del verbose
    _finish(beginning.start(dem, output, overwrite), quiet)


@app.command()
def check(
    settings: SettingsPath,
    output: OutputOption = None,
    overwrite: OverwriteOption = False,
    verbose: VerboseOption = False,
    quiet: QuietOption = False,
) -> None:
    """Print what a run would do, with sizes, memory and expected time; write nothing."""
    from fluvinv import beginning
    from fluvinv.progress import shown_progress

    with shown_progress(verbose, quiet) as progress:
        outcome = beginning.check(settings, output, overwrite, progress)
    _finish(outcome, quiet)


@app.command()
def network(
    settings: SettingsPath,
    output: OutputOption = None,
    overwrite: OverwriteOption = False,
    verbose: VerboseOption = False,
    quiet: QuietOption = False,
) -> None:
    """Draw the drainage alone: rivers, profiles, figures."""
    from fluvinv import pipeline
    from fluvinv.progress import shown_progress

    with shown_progress(verbose, quiet) as progress:
        outcome = pipeline.network(settings, output, overwrite, progress)
    _finish(outcome, quiet)


@app.command()
def run(
    settings: SettingsPath,
    output: OutputOption = None,
    overwrite: OverwriteOption = False,
    verbose: VerboseOption = False,
    quiet: QuietOption = False,
) -> None:
    """Do the whole job: from the DEM to the uplift history with its errors."""
    from fluvinv import pipeline
    from fluvinv.progress import shown_progress

    with shown_progress(verbose, quiet) as progress:
        outcome = pipeline.run(settings, output, overwrite, progress)
    _finish(outcome, quiet)


def _interrupt(_signal, _frame) -> None:
    raise KeyboardInterrupt


def _complain(message: str, verbose: bool) -> None:
    if verbose:
        traceback.print_exc()
    print(f"fluvinv: {message}", file=sys.stderr)


def main(arguments: list[str] | None = None) -> int:
    """Run the command line; return the exit code.

    Exit codes: 0 done, 1 a bug in the program, 2 settings or usage, 3 input data, 4 numerical failure, 5 output,
    130 interrupted.
    """
    arguments = sys.argv[1:] if arguments is None else arguments
    verbose = "-v" in arguments or "--verbose" in arguments
    with warnings.catch_warnings():
        if not sys.warnoptions:  # remarks of libraries are for developers: python -W shows them
            warnings.simplefilter("ignore")
        return _run(arguments, verbose)


def _run(arguments: list[str], verbose: bool) -> int:
    """Run one verb and turn what it raises into a message and an exit code."""
    try:
        code = app(args=arguments, prog_name="fluvinv", standalone_mode=False)
        if code == INTERRUPTED:  # how typer returns a KeyboardInterrupt
            raise KeyboardInterrupt
        return code if isinstance(code, int) else 0
    except FluvinvError as error:
        _complain(str(error), verbose)
        return error.exit_code
    except UsageError as error:
        _complain(f"{error.format_message()} `fluvinv --help` and `fluvinv VERB --help` tell what there is.", verbose)
        return 2
    except (KeyboardInterrupt, typer.Abort):
        print("fluvinv: interrupted; nothing was left half-written.", file=sys.stderr)
        return INTERRUPTED
    except MemoryError:
        _complain(
            "out of memory. `fluvinv check` tells what a run needs; choose a coarser uplift grid or channels.", verbose
        )
        return 4
    except Exception as error:
        _complain(
            f"a bug in the program ({type(error).__name__}: {error}). Please report it with your settings file and what"
            " `fluvinv -v` adds.",
            verbose,
        )
        return 1


def script() -> None:
    """Entry point of the installed command: `main` in a process of its own, which signals may stop."""
    stopping = (signal.SIGINT, signal.SIGTERM)
    for number in stopping:
        signal.signal(number, _interrupt)
    try:
        code = main()
    except KeyboardInterrupt:  # a second one, while the first was being answered
        code = INTERRUPTED
    finally:
        for number in stopping:
            signal.signal(number, signal.SIG_IGN)
    sys.exit(code)
