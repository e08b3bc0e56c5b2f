"""The command line. `main` is what the command `kernelfit` calls.

Exit status: 0 done; 1 a fault of kernelfit itself; 2 the input or the call is wrong; 3 the fit did not
converge and everything found is written; 130 interrupted.
"""

from __future__ import annotations

import os
import sys
import tempfile
import traceback
from collections.abc import Sequence
from typing import Annotated, Any

import typer
from typer.main import get_command

from kernelfit.cli._console import silence, tell, warnings_as_lines
from kernelfit.cli._usage import USAGE_ERROR, PlainUsage, option_lines, usage_lines
from kernelfit.cli.demo import demo_command
from kernelfit.cli.fit import fit_command
from kernelfit.cli.inspect import inspect_command
from kernelfit.errors import KernelfitError, NotConvergedError
from kernelfit.version import __version__

__all__ = ["app", "main"]

DONE, OWN_FAULT, WRONG_INPUT, NOT_CONVERGED, INTERRUPTED = 0, 1, 2, 3, 130

app = typer.Typer(name="kernelfit", add_completion=False, rich_markup_mode=None, pretty_exceptions_enable=False)
app.command("inspect", cls=PlainUsage, short_help="Look at a recording before any fit.")(inspect_command)
app.command("fit", cls=PlainUsage)(fit_command)
app.command("demo", cls=PlainUsage)(demo_command)


def _show_version(asked: bool) -> None:
    if asked:
        typer.echo(f"kernelfit {__version__}")
        raise typer.Exit


@app.callback(epilog="Functional coupling, not synapses. For research; not for clinical decisions.")
def _kernelfit(
    version: Annotated[
        bool,
        typer.Option("--version", callback=_show_version, is_eager=True, help="Show the version and stop."),
    ] = False,
) -> None:
    """How strongly, how far and for how long a spike at one site changes firing at others.

    Start with `kernelfit demo`, then `kernelfit inspect` and `kernelfit fit` on your own tables. Each command tells
    more: `kernelfit fit --help`.
    """


def main(argv: Sequence[str] | None = None) -> int:
    """Run one command.

    Parameters
    ----------
    argv : the arguments after the program's name; None: those of the process

    Returns
    -------
    The exit status.
    """
    arguments = list(sys.argv[1:] if argv is None else argv)
    try:
        with warnings_as_lines():
            return _run(arguments)
    except typer.Exit as end:  # --help and --version
        return int(end.exit_code)
    except USAGE_ERROR as error:
        tell(*usage_lines(error, _command_typed(arguments)))
        return WRONG_INPUT
    except KernelfitError as error:
        tell(*str(error).splitlines(), *option_lines(str(error)))
        return NOT_CONVERGED if isinstance(error, NotConvergedError) else WRONG_INPUT
    except (KeyboardInterrupt, typer.Abort):
        tell("", "Interrupted. No results were written.")
        return INTERRUPTED
    except BrokenPipeError:  # the reader of our output has gone; nothing is wrong
        silence(sys.stdout)
        return DONE
    except Exception as error:  # noqa: BLE001 - the border: whatever is left is our own fault, and is reported
        tell(*_own_fault_lines(error, arguments))
        return OWN_FAULT


def _run(arguments: list[str]) -> int:
    # Not `command.main`, which prints boxes and has its own statuses for interruptions and closed pipes.
    command: Any = get_command(app)
    with command.make_context("kernelfit", arguments) as context:
        status = command.invoke(context)
    sys.stdout.flush()
    return DONE if status is None else int(status)


def _command_typed(arguments: Sequence[str]) -> str:
    known = [command.name for command in app.registered_commands]
    return " ".join(["kernelfit", *(a for a in arguments[:1] if a in known)])


def _own_fault_lines(error: Exception, arguments: Sequence[str]) -> list[str]:
    said = f"{type(error).__name__}: {error}".splitlines()[0]
    first = f"This is a fault of kernelfit, not of your input: {said}"
    record = [
        f"kernelfit {__version__}, Python {sys.version.split()[0]}, {sys.platform}",
        f"arguments: {arguments!r}",
        *"".join(traceback.format_exception(error)).splitlines(),
    ]
    try:
        handle, path = tempfile.mkstemp(prefix="kernelfit-fault-", suffix=".txt", text=True)
        with os.fdopen(handle, "w", encoding="utf-8", errors="backslashreplace") as file:
            file.write("\n".join(record) + "\n")
    except OSError:
        return [first, "Please report it to the maintainers with the lines below.", *record]
    return [
        first,
        f"The full record is in {path}",
        "Please report it to the maintainers with that file; it holds your command line, so read it first.",
    ]
