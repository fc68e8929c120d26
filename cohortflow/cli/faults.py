"""What can go wrong on the command line, and its exit code; no traceback for anything a user can cause."""

from __future__ import annotations

import contextlib
import io
import os
import signal
import sys
import tempfile
import traceback
from collections.abc import Sequence
from types import FrameType
from typing import Any

import click

from cohortflow.errors import CohortflowError

DONE, FINDING, REFUSED, FAULT, INTERRUPTED = 0, 1, 2, 3, 130


class UnknownCommand(CohortflowError):
    """There is no command of that name."""

    slug = "call"


def guarded(group: click.Group, arguments: Sequence[str] | None) -> int:
    """Run the group; the exit code of the process. Every way to end is told in one line on stderr."""
    _prepare()
    try:
        code = group.main(args=arguments, prog_name="cohortflow", standalone_mode=False)
        sys.stdout.flush()
        return int(code or DONE)
    except CohortflowError as error:
        return _told(f"cohortflow: {error.slug}: {error}", REFUSED)
    except click.UsageError as error:
        hint = f" See `{error.ctx.command_path} --help`." if error.ctx else ""
        return _told(f"cohortflow: call: {error.format_message()}{hint}", REFUSED)
    except click.ClickException as error:
        return _told(f"cohortflow: call: {error.format_message()}", REFUSED)
    except BrokenPipeError:  # the reader of our output has seen enough
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return DONE
    except (KeyboardInterrupt, click.Abort):
        return _told("cohortflow: stopped; nothing half-written is left.", INTERRUPTED)
    except MemoryError:
        return _told("cohortflow: input: not enough memory; free some, or read fewer files at once.", REFUSED)
    except Exception as error:
        return _told(_fault(error), FAULT)


def _prepare() -> None:
    """A polite kill ends like Ctrl-C; a terminal that lacks a sign gets its code instead of a fault."""
    with contextlib.suppress(ValueError):  # not the main thread: somebody else minds the signals
        signal.signal(signal.SIGTERM, _terminated)
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="backslashreplace")


def _told(text: str, code: int) -> int:
    click.echo(text, err=True)
    return code


def _fault(error: Exception) -> str:
    """One line; the traceback goes into a file of the temp folder."""
    handle, path = tempfile.mkstemp(prefix="cohortflow-fault-", suffix=".txt")
    with os.fdopen(handle, "w", encoding="utf-8") as file:
        file.write("".join(traceback.format_exception(error)))
    what = " ".join(f"{type(error).__name__}: {error}".split())
    return f"cohortflow: fault: a fault of the program, not of your input ({what[:200]}). Details: {path}"


def _terminated(number: int, frame: FrameType | None) -> Any:
    raise KeyboardInterrupt
