"""Runs a command and turns whatever happens into an exit code and, at most, a short message.

A command returns a `Result`; its text goes to standard output here, so that a reader who closes
the pipe early does not change the exit code.
"""

from __future__ import annotations

import os
import signal
import sys
import threading
import traceback
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from types import FrameType

import click

from synth.errors import ExpressionError, PolewrightError

__all__ = ["DEFECT", "INTERRUPTED", "TERMINATED", "USAGE", "Result", "run", "say"]

USAGE, DEFECT = 2, 70
# 128 and the number of the signal, the convention of shells.
INTERRUPTED, TERMINATED = 130, 143


@dataclass(frozen=True)
class Result:
    """What a command hands back: exit code and text for standard output."""

    code: int
    text: str


class _TerminatedError(BaseException):
    """The process was asked to end; not an `Exception`, so that nothing takes it for a failure."""


def run(arguments: list[str]) -> int:
    """Run the command line with these arguments; the exit code."""
    try:
        with _ending_in_order():
            return _run(arguments)
    except _TerminatedError:
        say("terminated")
        return TERMINATED


@contextmanager
def _ending_in_order() -> Iterator[None]:
    """Lets SIGTERM end the work like an interrupt, processes and temporary folders tidied up; a
    second one ends the process at once."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return

    def end(number: int, frame: FrameType | None) -> None:
        signal.signal(signal.SIGTERM, signal.SIG_DFL)
        raise _TerminatedError

    before = signal.signal(signal.SIGTERM, end)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)


def _run(arguments: list[str]) -> int:
    from netlist.cli.commands import polewright

    code = 0
    try:
        result = _attempt(polewright, arguments)
        code = result.code
        if result.text:
            click.echo(result.text, nl=False)
        sys.stdout.flush()
    except BrokenPipeError:
        _silence_stdout()
    except OSError as error:
        _silence_stdout()
        say(f"cannot write to standard output: {(error.strerror or 'it failed').lower()}")
        return USAGE
    return code


def say(message: str) -> None:
    """Lines on standard error, printable, each with the name of the program."""
    for line in message.splitlines() or [""]:
        text = "".join(c if c.isprintable() else " " for c in line)
        click.echo(f"polewright: {text}", err=True)


def _attempt(command: click.Command, arguments: list[str]) -> Result:
    """The result of a command, or of its failure."""
    wants_traceback = "--traceback" in arguments
    try:
        result = command.main(arguments, prog_name="polewright", standalone_mode=False)
    except click.exceptions.NoArgsIsHelpError as error:
        click.echo(error.format_message(), err=True)
        return Result(USAGE, "")
    except click.ClickException as error:
        return _refused(error)
    except (KeyboardInterrupt, click.Abort):
        say("interrupted")
        return Result(INTERRUPTED, "")
    except SystemExit:  # how click answers when the reader of a help text leaves early
        return Result(0, "")
    except Exception as error:
        if wants_traceback:
            traceback.print_exc()
        return _failed(error, hint=not wants_traceback)
    return result if isinstance(result, Result) else Result(0, "")


def _refused(error: click.ClickException) -> Result:
    where = ""
    if isinstance(error, click.UsageError) and error.ctx is not None:
        where = f" (see {error.ctx.command_path} --help)"
    say(" ".join(error.format_message().split()).rstrip(".") + where)
    return Result(USAGE, "")


def _failed(error: Exception, *, hint: bool) -> Result:
    if isinstance(error, PolewrightError) and error.exit_code != DEFECT:
        say(str(error))
        if isinstance(error, ExpressionError):
            click.echo(error.marked, err=True)
        return Result(error.exit_code, "")
    say(f"a defect in the program: {_described(error)}")
    if hint:
        say("the same command with --traceback shows where; please report it with the job")
    return Result(DEFECT, "")


def _described(error: BaseException) -> str:
    """Kind, message and place of an unexpected error, one line."""
    message = " ".join(str(error).split())
    frames = traceback.extract_tb(error.__traceback__)
    place = f" ({Path(frames[-1].filename).name}:{frames[-1].lineno})" if frames else ""
    return f"{type(error).__name__}{': ' if message else ''}{message}{place}"


def _silence_stdout() -> None:
    """Keep the interpreter from writing to a closed pipe or a full disk when it ends."""
    devnull = os.open(os.devnull, os.O_WRONLY)
    os.dup2(devnull, sys.stdout.fileno())
    os.close(devnull)
