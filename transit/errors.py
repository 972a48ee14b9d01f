"""The faults that a user can cause or meet. Each says where, what was found, what was expected, what to do."""


class TransitError(Exception):
    """Base of every fault that a user can cause or meet; the command line prints it as one line, exit 1."""


class InputFileError(TransitError, ValueError):
    """A file of the user's cannot be used.

    Parameters
    ----------
    message : str
        What was found, what was expected and what to do.
    path : str, optional
        File concerned; put in front of the message.
    line : int, optional
        Line of that file, counted from 1.
    """

    def __init__(self, message: str, path: str | None = None, line: int | None = None):
        self.path = path
        self.line = line
        where = "" if path is None else f"{path}, line {line}: " if line is not None else f"{path}: "
        super().__init__(where + message)


class SettingError(TransitError, ValueError):
    """An option, a prior or a species name that cannot be used."""


class SystemFileError(InputFileError):
    """A system file with an unknown key, a contradictory pair or an impossible value."""


class OpacityTableError(TransitError, ValueError):
    """An opacity table that is missing, unreadable or altered."""


class OutputError(TransitError, OSError):
    """A result cannot be written where it was asked for."""


class WorkerError(TransitError, RuntimeError):
    """A worker process died before its fit was done."""
