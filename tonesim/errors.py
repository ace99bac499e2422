"""Everything that can go wrong in a way a user can mend, each with its own exit code."""


class TonesimError(Exception):
    """Root of all errors meant for the user: one sentence, no traceback."""

    exit_code = 10


class DesignError(TonesimError):
    """A design file, a part, a measured table or a value in them cannot be used."""

    exit_code = 11


class RecordingError(TonesimError):
    """A recording or impulse response cannot be read, or holds unusable samples."""

    exit_code = 12


class OutputError(TonesimError):
    """A result cannot be written where it was asked for."""

    exit_code = 13


class SolverError(TonesimError):
    """A circuit has no usable solution (it cannot idle, or a step did not settle)."""

    exit_code = 14


class UsageError(TonesimError):
    """Options that do not go together, or a value outside its range."""

    exit_code = 2
