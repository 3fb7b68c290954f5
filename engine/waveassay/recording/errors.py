"""The error of a recording that cannot be read."""

from waveassay.contract import SignalError

EXPORT_AGAIN = "Export it again with the software that recorded it, or leave the file out"


class RecordingError(SignalError):
    """A recording cannot be read.

    Its text is ``<file>: <what is wrong, where>. <what to do>.``
    """


def recording_error(path: str, wrong: str, advice: str = EXPORT_AGAIN) -> RecordingError:
    """Return the error with its text in the one order that all of them have."""
    return RecordingError(f"{path}: {wrong}. {advice}.")
