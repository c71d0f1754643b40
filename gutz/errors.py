"""Everything `gutz` raises on purpose, as one small tree.

    GutzError
    ├── InputError(ValueError)      a mistake in a call, a command line or a file      exit code 2
    ├── DataError(ValueError)       stored data unreadable, truncated or foreign       exit code 3
    ├── OutputError(OSError)        output exists, is locked or cannot be written      exit code 4
    └── ResourceError(RuntimeError) out of disk, memory or time                        exit code 5

Each message is one sentence that names the field, the value got and what is allowed.
A single bad point in a batch never raises: it carries a status instead (see `gutz.solver`).
"""


class GutzError(Exception):
    """Root of all deliberate errors; `exit_code` is what the command line returns."""

    exit_code = 70


class InputError(GutzError, ValueError):
    """A mistake in a call, a command line or an input file; nothing was computed."""

    exit_code = 2


class DataError(GutzError, ValueError):
    """Stored data cannot be read: truncated, damaged, or not written by `gutz`."""

    exit_code = 3


class OutputError(GutzError, OSError):
    """The output exists already, is in use by another run, or cannot be written."""

    exit_code = 4


class ResourceError(GutzError, RuntimeError):
    """The machine does not have the disk, memory or time that was asked for."""

    exit_code = 5
