"""Every error a user can meet, in one tree.

BenchkitError                  anything this suite says on purpose; carries an exit code
├── InputError                 bad file, key, value or usage                         exit 2
├── LinkError                  an instrument could not be spoken to (instruments/)   exit 3
└── Stopped                    a run was ended before its time                       exit 3
    ├── Refused                a permissive was missing: nothing was energised
    ├── Tripped                a limit was passed while energised
    ├── OperatorStopped        a person said no, or pressed Ctrl-C
    └── NotConfirmedOff        outputs could not be confirmed off                    exit 4

The kinds of LinkError are drawn at the top of ``instruments/errors.py``. A LinkError ends a run
like a trip does: the guard switches off first, and the exit code says whether that was confirmed.
"""

from __future__ import annotations


class BenchkitError(Exception):
    """Base of every error raised on purpose; ``exit_code`` is what the command line returns."""

    exit_code = 3


class InputError(BenchkitError):
    """A file, key, value or option that cannot be used; the text says what would be right."""

    exit_code = 2


class LinkError(BenchkitError):
    """An instrument could not be reached, did not answer, or answered nonsense."""


class Stopped(BenchkitError):
    """A run that ended before its plan was done, with the outputs confirmed off."""


class Refused(Stopped):
    """A permissive was missing, so nothing was energised."""


class Tripped(Stopped):
    """A guarded limit was passed; the text gives threshold, reading and time."""


class OperatorStopped(Stopped):
    """The operator declined, or interrupted the run."""


class NotConfirmedOff(Stopped):
    """The outputs could not be confirmed off: a person has to make the bench safe by hand."""

    exit_code = 4
