"""The command line: ``whistler COMMAND``. Commands import what they need when they run."""

from __future__ import annotations

import errno
import sys
import traceback
import warnings
from typing import Annotated

import typer

from whistler import __version__
from whistler.commands import common
from whistler.commands.completeness import completeness
from whistler.commands.fit import fit
from whistler.commands.measure import measure
from whistler.commands.night import night
from whistler.commands.predict import predict
from whistler.commands.synthesize import synthesize
from whistler.errors import Notice, Stopped, WhistlerError
from whistler.stopping import listen

CANNOT_WRITE = 74
USAGE_ERROR = typer.BadParameter.__mro__[1]  # the class of every parsing error, vendored or not

app = typer.Typer(
    name="whistler",
    add_completion=False,
    no_args_is_help=False,  # it would come as an error message of twenty lines
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 80},
)


def _print_version(asked: bool) -> None:
    if asked:
        print(f"whistler {__version__}")
        raise typer.Exit(0)


@app.callback()
def _whistler(
    version: Annotated[
        bool,
        typer.Option("--version", callback=_print_version, is_eager=True, help="Print version."),
    ] = False,
) -> None:
    """L-values and electron densities, with error bars, from VLF recordings of whistlers."""


for command in (measure, night, fit, predict, synthesize, completeness):
    app.command()(command)


def main() -> None:
    """Run the command line of this process and exit with the code of the contract."""
    listen()
    common.speak_any_alphabet()
    sys.exit(run(sys.argv[1:]))


def run(arguments: list[str]) -> int:
    """Return the exit code after running one command; every failure is one line on stderr.

    Parameters
    ----------
    arguments : list of str
        Command line without the program's name.
    """
    verbose = "--verbose" in arguments or "-v" in arguments
    if not verbose:
        warnings.simplefilter("ignore")  # stderr holds our own lines only
    try:
        code = app(arguments, prog_name="whistler", standalone_mode=False)
        sys.stdout.flush()
        return int(code or 0)
    except Exception as error:
        return _failure(error, verbose=verbose)
    except SystemExit:  # how typer reports a reader of standard output that has seen enough
        common.mute_output()
        return 0
    except Stopped as stop:
        common.mute_output()
        common.show(stop.notice)
        return 128 + stop.signal_number


def _failure(error: Exception, *, verbose: bool) -> int:
    """Return the exit code of an error after showing its line."""
    if isinstance(error, BrokenPipeError):  # the reader has seen enough
        common.mute_output()
        return 0
    if verbose:
        traceback.print_exception(error)
    if isinstance(error, WhistlerError):
        common.show(error.notice)
        return error.exit_code
    if isinstance(error, USAGE_ERROR):
        common.show(_usage_notice(error))
        return 2
    if isinstance(error, OSError) and error.errno in (errno.ENOSPC, errno.EDQUOT, errno.EIO):
        common.mute_output()
        common.show(Notice("E401", "output", f"cannot be written ({error.strerror})", "free space"))
        return CANNOT_WRITE
    from fieldlines.errors import FieldlinesError

    if isinstance(error, FieldlinesError):
        reason, _, step = str(error).partition("; ")
        common.show(Notice("E601", "whistler", reason, step or "choose another value"))
        return 2
    from whistler.savefile import fault_notice

    common.show(fault_notice("whistler", error))
    return common.INTERNAL


def _usage_notice(error: Exception) -> Notice:
    """Return the line for a command line that cannot be parsed."""
    context = getattr(error, "ctx", None)
    command = context.command_path if context is not None else "whistler"
    shown = getattr(error, "format_message", lambda: str(error))()
    reason = " ".join(str(shown).split()).rstrip(".")
    return Notice("E605", command, reason, f"see '{command} --help'")
