"""The least work of the whole chain: what no way of doing it can leave out.

Bytes read and converted once; the transforms that must be done, as they are cheapest; a pass over
the spectra for the features; the numbers written. Nothing else: no windows, no tapers applied, no
squares, no masks. Buffers are made before the clock starts.

``python -m benchmarks.full_bound RECORDING CHANNELS LENGTH_S [PRECISION...]`` prints CPU seconds of
each stage in each precision.
"""

import json
import sys
import tempfile
import time
from collections.abc import Callable, Iterable
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from benchmarks.full_data import RATE_HZ

NEW_RATE_HZ, LENGTH, STEP, SEGMENT, TAPERS, FEATURES = 128, 512, 256, 256, 5, 14
# A block of overlap-save, and what its response takes on either side: 12 s, for 0.5 Hz.
BLOCK, HALF = 65_536, 12 * RATE_HZ
_CHANNELS_AT_ONCE, _ROWS_AT_ONCE = 4, 160  # the cheapest of those tried
#: What filters and what transforms epochs: "standard" is what a run does that is not told.
PRECISIONS = {
    "double": (np.float64, np.float64),
    "standard": (np.float64, np.float32),
    "single": (np.float32, np.float32),
}
STAGES = ("read", "filter and resample", "welch", "multitaper", "features", "export")


def bound(path: Path, channels: int, length_s: float, precision: str) -> dict[str, float]:
    """Return CPU seconds of each stage."""
    filtering, spectral = PRECISIONS[precision]
    samples = round(length_s * NEW_RATE_HZ)
    epochs = channels * ((samples - LENGTH) // STEP + 1)
    segments = channels * ((samples - SEGMENT) // (SEGMENT // 2) + 1)
    blocks = -(-channels * round(length_s * RATE_HZ) // (BLOCK - 2 * HALF))
    return {
        "read": _read(path, filtering),
        "filter and resample": _filter(-(-blocks // _CHANNELS_AT_ONCE), filtering),
        "welch": _transform(segments, SEGMENT, spectral),
        "multitaper": _transform(epochs * TAPERS, LENGTH, spectral),
        "features": _sum(epochs, spectral),
        "export": _write(epochs, path.parent),
    }


def bounds(
    path: Path, channels: int, length_s: float, precisions: Iterable[str] = PRECISIONS
) -> dict[str, dict[str, float]]:
    """Return CPU seconds by precision and stage; a short one of each goes first, to warm up."""
    found = {}
    for precision in precisions:
        bound(path, channels, min(length_s, 60), precision)
        found[precision] = bound(path, channels, length_s, precision)
    return found


def _cpu_s(work: Callable[[], object]) -> float:
    start = time.process_time()
    work()
    return time.process_time() - start


def _read(path: Path, dtype: type) -> float:
    octets = bytearray(1 << 18)
    raw = np.frombuffer(octets, "<i2")
    converted: NDArray[np.floating] = np.empty(raw.size, dtype)

    def work() -> None:
        with path.open("rb", buffering=0) as file:
            while file.readinto(octets):
                np.copyto(converted, raw)

    return _cpu_s(work)


def _filter(times: int, dtype: type) -> float:
    from scipy import fft

    decimation = RATE_HZ // NEW_RATE_HZ
    blocks = _noise((_CHANNELS_AT_ONCE, BLOCK), dtype)
    bins = fft.rfft(blocks[:, : BLOCK // decimation], axis=-1)

    def work() -> None:
        for _ in range(times):
            fft.rfft(blocks, axis=-1)
            fft.irfft(bins, n=BLOCK // decimation, axis=-1)

    return _cpu_s(work)


def _transform(rows: int, length: int, dtype: type) -> float:
    from scipy import fft

    some = _noise((_ROWS_AT_ONCE, length), dtype)

    def work() -> None:
        for _ in range(-(-rows // _ROWS_AT_ONCE)):
            fft.rfft(some, axis=-1)

    return _cpu_s(work)


def _sum(epochs: int, dtype: type) -> float:
    some = np.square(_noise((_ROWS_AT_ONCE, LENGTH // 2 + 1), dtype))

    def work() -> None:
        for _ in range(-(-epochs // _ROWS_AT_ONCE)):
            some.sum()

    return _cpu_s(work)


def _write(epochs: int, folder: Path) -> float:
    numbers = np.zeros((epochs, FEATURES))
    with tempfile.TemporaryFile(dir=folder) as file:
        return _cpu_s(lambda: file.write(numbers.data))


def _noise(shape: tuple[int, int], dtype: type) -> NDArray[np.floating]:
    return np.random.default_rng(0).standard_normal(shape).astype(dtype)


if __name__ == "__main__":
    recording, count, seconds, *some = sys.argv[1:]
    print(json.dumps(bounds(Path(recording), int(count), float(seconds), some or PRECISIONS)))
