"""Turns errors into one clear message and the contract's exit code."""

from __future__ import annotations

import os
import sys
import traceback
from collections.abc import Iterator
from contextlib import contextmanager, suppress

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
    first, *others = text.splitlines() or [type(error).__name__]
    _complain("\n  ".join([f"benchkit: {first}", *others]))
    return error.exit_code


def _complain(text: str) -> None:
    """To standard error; a terminal that is gone must not change the exit code."""
    with suppress(OSError, ValueError):
        sys.stderr.write(text + "\n")
        sys.stderr.flush()


@contextmanager
def leaving() -> Iterator[None]:
    """No traceback reaches a user (set BENCHKIT_DEBUG=1 to see one)."""
    try:
        yield
    except typer.Exit as done:
        if not _all_written() and done.exit_code < INTERNAL:
            _complain("benchkit: standard output could not be written")
            raise typer.Exit(INTERNAL) from None
        raise
    except BenchkitError as error:
        raise typer.Exit(report_error(error)) from None
    except KeyboardInterrupt:
        _complain("benchkit: stopped by Ctrl-C")
        raise typer.Exit(INTERNAL) from None
    except BrokenPipeError:
        raise typer.Exit(INTERNAL) from None
    except OSError as error:
        _complain(f"benchkit: {error.filename or 'a file'}: {error.strerror or error}")
        raise typer.Exit(INTERNAL) from None
    except Exception as error:  # noqa: BLE001  a defect of ours: say so, in one line
        if os.environ.get(DEBUG):
            traceback.print_exc()
        _complain(
            f"benchkit: defect in benchkit itself: {type(error).__name__}: {error} (outputs were "
            f"switched off if any were on; run again with {DEBUG}=1 and report what it prints)"
        )
        raise typer.Exit(INTERNAL) from None
    finally:
        _all_written()


def _all_written() -> bool:
    """Whether standard output took everything. What it did not is dropped here: at the end of the
    process it would turn the exit code into another."""
    try:
        sys.stdout.flush()
    except (OSError, ValueError):
        with suppress(OSError, ValueError):
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return False
    return True
