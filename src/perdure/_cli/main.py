"""Entry point of the command ``perdure``: commands, signals, exit statuses."""

from __future__ import annotations

import contextlib
import os
import signal
import sys
import threading
from collections.abc import Iterator, Sequence
from types import FrameType

import click

from perdure import __version__
from perdure._cli.check import check
from perdure._cli.crosscheck import crosscheck
from perdure._cli.invocation import Invocation
from perdure._cli.output import is_shortage, print_problems
from perdure._cli.run import run
from perdure._cli.show import show
from perdure.errors import PerdureError

__all__ = ["main"]

DONE, WRONG, STOPPED, FAULT = 0, 2, 3, 70

_MEMORY_ADVICE = (
    "out of memory; ask for fewer cells ([cells] count) or bursts ([bursts] per_cell). `perdure check CASE` "
    "tells the memory that a run needs"
)


class _Terminated(SystemExit):
    """Raised by SIGTERM, so that `finally` and `with` clean up on the way out."""


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="perdure", message="%(prog)s %(version)s")
def cli() -> None:
    """Long-run statistics of chaotic and noisy systems, each number with an error budget."""


for _command in (run, check, show, crosscheck):
    cli.add_command(_command)


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line; the exit status of design: 0, 1, 2, 3 or 70.

    Parameters
    ----------
    arguments : sequence of str or None
        Without the name of the program; None takes those of the process.
    """
    invocation = Invocation()
    with _sigterm_ends():
        try:
            color = False if os.environ.get("NO_COLOR") else None
            argv = None if arguments is None else list(arguments)
            status = cli.main(argv, prog_name="perdure", standalone_mode=False, obj=invocation, color=color)
        except click.ClickException as error:
            return _refuse(error)
        except (click.Abort, KeyboardInterrupt):
            print_problems("interrupted; density files are written whole or not at all")
            return STOPPED
        except _Terminated:
            print_problems("ended by SIGTERM; density files are written whole or not at all")
            return STOPPED
        except PerdureError as error:
            _show_traceback(invocation)
            print_problems(str(error))
            return error.exit_status
        except MemoryError:
            print_problems(_MEMORY_ADVICE)
            return STOPPED
        except Exception as fault:
            return _fault(fault, invocation)
    return status if isinstance(status, int) else DONE


def _refuse(error: click.ClickException) -> int:
    """Tell what is wrong with the arguments."""
    if isinstance(error, click.exceptions.NoArgsIsHelpError):
        error.show()
        return WRONG
    print_problems(error.format_message())
    if isinstance(error, click.UsageError) and error.ctx is not None:
        print_problems(f"`{error.ctx.command_path} --help` lists what is allowed")
    return WRONG


def _fault(fault: Exception, invocation: Invocation) -> int:
    """Tell of an exception that nobody meant to raise."""
    if isinstance(fault, OSError) and is_shortage(fault):
        print_problems(f"out of resources ({fault.strerror}); free some, then run again")
        return STOPPED
    _show_traceback(invocation)
    kind, text = type(fault).__name__, " ".join(str(fault).split())
    advice = "" if invocation.verbose else "; -v adds the traceback"
    print_problems(f"a fault of perdure, please report it with the case file: {kind}: {text}{advice}")
    return FAULT


def _show_traceback(invocation: Invocation) -> None:
    """Print the traceback of the exception being handled, if -v asks for it."""
    if invocation.verbose:
        import traceback

        traceback.print_exc()


@contextlib.contextmanager
def _sigterm_ends() -> Iterator[None]:
    """While inside, SIGTERM unwinds the stack; in another thread than the main one handlers cannot be set."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = signal.signal(signal.SIGTERM, _terminate)
    try:
        yield
    finally:
        # None: the handler before was not set from Python and cannot be put back.
        signal.signal(signal.SIGTERM, signal.SIG_DFL if before is None else before)


def _terminate(number: int, frame: FrameType | None) -> None:
    raise _Terminated(STOPPED)


if __name__ == "__main__":
    sys.exit(main())
