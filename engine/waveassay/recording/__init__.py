"""Files in: EDF, EDF+ and BDF recordings, their facts, gaps, annotations and samples."""

from waveassay.recording.digital import Digital
from waveassay.recording.errors import RecordingError
from waveassay.recording.facts import Annotation, Facts, SignalFacts
from waveassay.recording.reader import Recording, open_recording, read_facts

__all__ = [
    "Annotation",
    "Digital",
    "Facts",
    "Recording",
    "RecordingError",
    "SignalFacts",
    "open_recording",
    "read_facts",
]
