"""A call of the command line in, an exit code out: every error as one line on standard error."""

from __future__ import annotations

import errno
import os
import sys
import traceback
from collections.abc import Callable
from typing import TextIO

import typer

from stream.cli.screen import visible
from stream.errors import BedloadError, CannotCreate, FileTrouble, InputMissing, NoPermission, UsageError

__all__ = ["BROKEN_PIPE", "INTERRUPTED", "TRACEBACK", "exit_code_of"]

INTERRUPTED = 130
"""Stopped by Ctrl-C: 128 + SIGINT, as shells report it."""

BROKEN_PIPE = 141
"""Whoever read our output went away: 128 + SIGPIPE, as shells report it."""

BUG = 70

TRACEBACK = "BEDLOAD_TRACEBACK"
"""Environment variable: at 1, errors show where they were raised."""


def exit_code_of(call: Callable[[], None]) -> int:
    """Runs `call` and flushes standard output; says what went wrong on standard error."""
    try:
        call()
        sys.stdout.flush()
    except typer.Exit as end:
        return end.exit_code
    except (typer.Abort, KeyboardInterrupt):
        return _say("stopped before the end", INTERRUPTED)
    except typer.TyperException as error:
        return _say(_usage(error), UsageError.exit_code)
    except BedloadError as error:
        return _say(str(error), error.exit_code)
    except OSError as error:
        return _system(error)
    except Exception as error:
        return _bug(error)
    return 0


def _say(text: str, code: int) -> int:
    try:
        _show_traceback()
        for line in text.splitlines():
            print(f"bedload: {visible(line)}", file=sys.stderr)
    except OSError:  # the log may be on the very disk that is full; the code still says what was wrong
        _discard(sys.stderr)
    return code


def _show_traceback() -> None:
    if os.environ.get(TRACEBACK) == "1":
        traceback.print_exc()


def _usage(error: typer.TyperException) -> str:
    context = getattr(error, "ctx", None)
    command = context.command_path if context else "bedload"
    said = error.format_message().rstrip(".")
    return f"{said}{'' if said.endswith('?') else ';'} `{command} --help` says what there is"


def _system(error: OSError) -> int:
    if error.errno == errno.EPIPE:
        _discard(sys.stdout)
        return BROKEN_PIPE
    place = f"{error.filename}: " if error.filename else ""
    return _say(f"{place}{error.strerror or error}", _system_code(error))


def _discard(stream: TextIO) -> None:
    """What is left in the buffer goes nowhere; closing would raise once more at exit."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), stream.fileno())


def _system_code(error: OSError) -> int:
    if isinstance(error, FileNotFoundError | NotADirectoryError):
        return InputMissing.exit_code
    if isinstance(error, PermissionError):
        return NoPermission.exit_code
    if isinstance(error, FileExistsError) or error.errno in (errno.ENOSPC, errno.EDQUOT, errno.EROFS):
        return CannotCreate.exit_code
    return FileTrouble.exit_code


def _bug(error: Exception) -> int:
    cure = "" if os.environ.get(TRACEBACK) == "1" else f"; {TRACEBACK}=1 shows where"
    return _say(f"a bug in bedload, please report it: {type(error).__name__}: {error}{cure}", BUG)
