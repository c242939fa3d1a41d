"""The way in and out: whatever happens ends in one message and one exit status."""

from __future__ import annotations

import os
import signal
import sys
import traceback
from collections.abc import Sequence
from pathlib import Path
from types import FrameType

import click

from withstand.cli.commands import withstand
from withstand.cli.layout import visible
from withstand.cli.state import State
from withstand.errors import InputError, NumericalError

DONE, FAULT, REFUSED, INTERRUPTED = 0, 1, 2, 130


def main(arguments: Sequence[str] | None = None) -> None:
    """Run the command line and leave with its exit status."""
    # A worker pool waits on a plain kill; the same way out as for Ctrl-C closes it and the ledger.
    signal.signal(signal.SIGTERM, _interrupt)
    sys.exit(status(arguments))


def status(arguments: Sequence[str] | None = None) -> int:
    """Run the command line.

    Parameters
    ----------
    arguments : sequence of str, optional
        Those of the process if left out.

    Returns
    -------
    int
        0 done, 1 internal fault, 2 input refused, 130 interrupted.
    """
    state = State()
    try:
        withstand.main(
            args=None if arguments is None else list(arguments), prog_name="withstand", standalone_mode=False, obj=state
        )
    except click.exceptions.NoArgsIsHelpError as error:
        click.echo(error.ctx.get_help() if error.ctx else "", err=True)
        return REFUSED
    except click.ClickException as error:
        context = getattr(error, "ctx", None)
        hint = f" See {context.command_path} --help." if context is not None else ""
        told = " ".join(error.format_message().split())  # a list of choices comes in lines of its own
        return _say(f"{told.rstrip('.')}.{hint}", REFUSED)
    except InputError as error:
        return _say(str(error), REFUSED, state)
    except (KeyboardInterrupt, click.Abort):
        return _say(_interrupted(state), INTERRUPTED)
    except BrokenPipeError:
        # Whoever read the output has seen enough; what is still buffered goes nowhere.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return DONE
    except NumericalError as error:
        return _say(f"the numbers went wrong: {error}", FAULT, state)
    except Exception as error:
        return _say(_fault(error, state), FAULT, state)
    return DONE


def _interrupt(number: int, frame: FrameType | None) -> None:
    raise KeyboardInterrupt


def _say(message: str, code: int, state: State | None = None) -> int:
    if state is not None and state.debug:
        traceback.print_exc()
    click.echo(visible(f"withstand: {message}"), err=True)
    return code


def _interrupted(state: State) -> str:
    if state.ledger is not None and state.ledger.exists():
        return (
            f"interrupted. What was simulated is intact in {state.ledger}; give the same command again to go on, "
            f"or `withstand report {state.ledger.parent}` for a report of what there is."
        )
    return "interrupted. Nothing was stored."


def _fault(error: Exception, state: State) -> str:
    """Keep the traceback where the user can find it, and say so."""
    told = f"internal fault ({type(error).__name__}: {error})."
    for folder in (state.out, Path.cwd()):
        if folder is None or not folder.is_dir():
            continue
        try:
            place = folder / "fault.txt"
            place.write_text("".join(traceback.format_exception(error)), encoding="utf-8")
        except OSError:
            continue
        return f"{told} This is not your doing: please report it with {place} and the command you gave."
    return f"{told} This is not your doing: please report it with what --debug shows and the command you gave."
