"""The errors that reach a user, each with the exit code that the command line promises for it."""


class FluvinvError(Exception):
    """Root of every error that fluvinv raises on purpose.

    The message is one short paragraph: which key or file, what was found, what is expected, what to do.
    """

    exit_code = 1


class SettingsError(FluvinvError, ValueError):
    """A settings file or a command-line option that cannot be used."""

    exit_code = 2


class InputError(FluvinvError, ValueError):
    """An input file (DEM, raster, table) that is missing, unreadable or unfit for the job."""

    exit_code = 3


class NumericalError(FluvinvError, ArithmeticError):
    """A solver that failed or an answer that is not finite."""

    exit_code = 4


class OutputError(FluvinvError, OSError):
    """A results folder that cannot be written or must not be replaced."""

    exit_code = 5


class FluvinvWarning(UserWarning):
    """A finding that does not stop the run but that the reader of its result must know."""
