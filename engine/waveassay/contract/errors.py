"""Errors that are the user's to mend, with the exit code that the command line gives."""


class WaveassayError(Exception):
    """Something that a person can act on; its text is shown without a traceback."""

    exit_code = 1


class UsageError(WaveassayError):
    """Wrong usage, or an unsound recipe."""

    exit_code = 2


class RefusedError(WaveassayError):
    """The tool declines: the folder is in use, or what was finished would be changed."""

    exit_code = 5


class MachineError(WaveassayError):
    """The machine declines: disk, permission or memory."""

    exit_code = 6


class SignalError(WaveassayError):
    """A recording cannot go through a step; it fails alone and the others go on."""

    exit_code = 3
