"""The command `unmix`: parse, call, print.

`main` turns what happens into an exit status: 0 done, 1 a user's error (one line on standard error, no traceback),
2 usage, 3 done in part, 4 unfit (`check` only), 130 interrupted.
"""

from __future__ import annotations

import contextlib
import signal
import sys
import threading
import warnings
from collections.abc import Iterator, Sequence
from types import FrameType
from typing import NoReturn, TextIO

import click

from unmix.cli.group import unmix
from unmix.errors import UnmixError, UnmixWarning

__all__ = ["main"]

USER_ERROR, USAGE, INTERRUPTED, TERMINATED = 1, 2, 130, 143


def main(arguments: Sequence[str] | None = None) -> NoReturn:
    """Run the command line and exit with its status."""
    given = list(sys.argv[1:] if arguments is None else arguments)
    as_json = "--json" in given
    with _one_line_warnings(silent=as_json), _orderly_termination():
        status = _run(given, as_json)
    sys.exit(status)


def _run(arguments: list[str], as_json: bool) -> int:
    try:
        result = unmix.main(args=arguments, prog_name="unmix", standalone_mode=False)
    except click.UsageError as error:
        # One line where a script listens; a person also gets the usage line.
        _say("error", error.format_message()) if as_json else error.show()
        return USAGE
    except click.ClickException as error:
        _say("error", error.format_message())
        return error.exit_code
    except (click.Abort, KeyboardInterrupt):
        _say("interrupted", "nothing half-written was left behind")
        return INTERRUPTED
    except UnmixError as error:
        _say("error", str(error))
        return USER_ERROR
    except MemoryError:
        _say("error", "out of memory; give a shorter excerpt (start_s, stop_s) or close other programs")
        return USER_ERROR
    return result if isinstance(result, int) else 0


def _say(kind: str, message: str) -> None:
    click.echo(f"{kind}: {' '.join(message.split())}", err=True)


@contextlib.contextmanager
def _one_line_warnings(*, silent: bool) -> Iterator[None]:
    """Show warnings as single lines on standard error; with `--json` they stand in the object instead."""

    def show(
        message: Warning | str,
        category: type[Warning],
        filename: str,
        lineno: int,
        file: TextIO | None = None,
        line: str | None = None,
    ) -> None:
        if issubclass(category, UnmixWarning):
            _say("warning", str(message))
        else:
            _say("warning", f"{message} ({category.__name__} from {filename}:{lineno})")

    with warnings.catch_warnings():
        warnings.simplefilter("ignore" if silent else "always", UnmixWarning)
        if silent:
            warnings.simplefilter("ignore")
        warnings.showwarning = show
        yield


@contextlib.contextmanager
def _orderly_termination() -> Iterator[None]:
    """Leave by way of every `finally` when told to terminate, so that no unfinished files stay behind."""

    def leave(signum: int, frame: FrameType | None) -> NoReturn:
        raise SystemExit(TERMINATED)

    if threading.current_thread() is not threading.main_thread():
        yield  # handlers can be set in the main thread only
        return
    before = signal.signal(signal.SIGTERM, leave)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)
