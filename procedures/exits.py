"""Turns errors into one clear message and the contract's exit code."""

from __future__ import annotations

import os
import sys
import traceback
from collections.abc import Iterator
from contextlib import contextmanager

import typer

from benchkit.errors import BenchkitError, NotConfirmedOff

INTERNAL = 3
DEBUG = "BENCHKIT_DEBUG"


def report_error(error: BenchkitError) -> int:
    """Print an error for the person at the bench; returns its exit code."""
    text = str(error)
    if isinstance(error, NotConfirmedOff):
        bar = "!" * 78
        text = f"{bar}\n{text}\n{bar}"
    for number, line in enumerate(text.splitlines()):
        sys.stderr.write(f"benchkit: {line}\n" if number == 0 else f"  {line}\n")
    return error.exit_code


@contextmanager
def leaving() -> Iterator[None]:
    """No traceback reaches a user (set BENCHKIT_DEBUG=1 to see one)."""
    try:
        yield
    except BenchkitError as error:
        raise typer.Exit(report_error(error)) from None
    except KeyboardInterrupt:
        sys.stderr.write("benchkit: stopped by Ctrl-C\n")
        raise typer.Exit(INTERNAL) from None
    except BrokenPipeError:
        sys.stderr.close()
        raise typer.Exit(INTERNAL) from None
    except Exception as error:  # a defect of ours: say so, in one line
        if isinstance(error, typer.Exit):
            raise
        if os.environ.get(DEBUG):
            traceback.print_exc()
        sys.stderr.write(
            f"benchkit: defect in benchkit itself: {type(error).__name__}: {error} (outputs were "
            f"switched off if any were on; run again with {DEBUG}=1 and report what it prints)\n"
        )
        raise typer.Exit(INTERNAL) from None
