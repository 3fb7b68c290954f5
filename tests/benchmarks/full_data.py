"""Long invented recordings of many channels, written fast: a quarter of an hour made once, tiled.

Each channel is noise between pink and brown with waxing and waning 10 Hz waves, 50 Hz mains, a
constant offset, and now and then an artefact of a second in some of the channels.
"""

import shutil
import tempfile
from datetime import datetime
from fractions import Fraction
from pathlib import Path

import numpy as np

RATE_HZ = 512
TILE_S = 900
# Where a header says how long it is itself, and how many records follow.
_HEADER_SIZE, _RECORDS = slice(184, 192), slice(236, 244)


def label(number: int) -> str:
    """Return a channel's label."""
    return f"CH{number:02}"


def write(path: Path, channels: int, length_s: int) -> Path:
    """Write an EDF of whole seconds at `RATE_HZ`; the same arguments give the same bytes."""
    with tempfile.TemporaryDirectory(dir=path.parent) as place:
        tile = Path(place, "tile.edf")
        _write_tile(tile, channels, min(TILE_S, length_s))
        with tile.open("rb") as file:
            size = int(file.read(256)[_HEADER_SIZE])
            file.seek(0)
            header, records = bytearray(file.read(size)), file.read()
    header[_RECORDS] = str(length_s).encode().ljust(8)
    left = length_s * channels * RATE_HZ * 2
    with path.open("wb") as out:
        out.write(header)
        while left > 0:
            out.write(records[:left])
            left -= len(records)
    return path


def size_mb(channels: int, length_s: float) -> float:
    """Return how large such a file is."""
    return channels * RATE_HZ * 2 * length_s / 1e6


def room_for(folder: Path, needed_mb: float) -> bool:
    """Tell whether the disk would still have a tenth of its room left."""
    disk = shutil.disk_usage(folder)
    return needed_mb * 1e6 < disk.free - disk.total / 10


def _write_tile(path: Path, channels: int, length_s: int) -> None:
    from waveassay.recording.write import WrittenSignal, write_recording

    signals = [
        WrittenSignal(label(i), "uV", Fraction(RATE_HZ), _channel(i, length_s), -3276.8, 3276.7)
        for i in range(channels)
    ]
    write_recording(path, signals, datetime(2031, 4, 5, 9, 30), plain=True)


def _channel(number: int, length_s: int) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    from scipy import fft

    noise = np.random.default_rng([23, number])
    count = length_s * RATE_HZ
    transform = fft.rfft(noise.standard_normal(count))
    transform *= 1 / np.maximum(fft.rfftfreq(count, 1 / RATE_HZ), 0.2) ** 0.75
    x = fft.irfft(transform, count)
    time_s = np.arange(count) / RATE_HZ
    x *= 20 / np.std(x)
    waxing = 1 + 0.8 * np.sin(2 * np.pi * (0.05 + 0.001 * number) * time_s)
    x += 12 * np.sin(2 * np.pi * 10 * time_s) * waxing
    x += 8 * np.sin(2 * np.pi * 50 * time_s) + 15
    for start_s in range(95, length_s - 1, 180):
        if noise.random() < 0.5:
            x[start_s * RATE_HZ : (start_s + 1) * RATE_HZ] += 600
    return np.asarray(x, np.float64)
