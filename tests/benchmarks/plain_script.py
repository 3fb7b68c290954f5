"""The plain chain as a researcher would write it: numpy and scipy on the whole array.

It shares no code with the stages, and does what the recipe of `plain_chain.py` asks for.
``python plain_script.py RECORDING`` prints the mean of each feature.
"""

import sys
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import fft, ndimage, signal

from waveassay.recording import open_recording

HIGH_PASS_HZ, LOW_PASS_HZ, ORDER = 0.5, 40.0, 4
NEW_RATE_HZ, ATTENUATION_DB, TRANSITION = 128, 100.0, 0.2
RANGE_UV, WINDOW_S = 250.0, 1
EPOCH_S, STEP_S, HALF_BANDWIDTH_HZ = 4, 2, 0.75
DELTA_HZ, ALPHA_HZ, TOTAL_HZ = (0.5, 4.0), (8.0, 13.0), (0.5, 40.0)
EDGE_SHARE, EDGE_WITHIN_HZ = 0.95, (0.5, 30.0)

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Features:
    """One row an epoch of the grid; the columns have a row a kept epoch."""

    start_s: Array
    kept: NDArray[np.bool_]
    columns: dict[str, Array]


def features_of_file(path: Path) -> Features:
    """Read the first signal and return its features."""
    with open_recording(path) as recording:
        whole = recording.facts.pieces[0]
        rate_hz = recording.facts.signals[0].rate_hz
        (x,) = recording.read([0], 0, whole.start_s, whole.stop_s)
    return features(np.asarray(x, np.float64), int(rate_hz))


def features(x: Array, rate_hz: int) -> Features:
    """Filter, resample, mask, cut, estimate and measure."""
    x, ringing = band_passed(x, rate_hz)
    y, half_kernel = resampled(x, rate_hz)
    masked = too_large(y)
    edge = int(np.ceil((ringing + half_kernel) / rate_hz * NEW_RATE_HZ))
    masked[:edge] = masked[-edge:] = True
    length, step = EPOCH_S * NEW_RATE_HZ, STEP_S * NEW_RATE_HZ
    first = np.arange(0, y.size - length + 1, step)
    touched = np.lib.stride_tricks.sliding_window_view(masked, length)[first].any(axis=-1)
    kept = np.asarray(~touched, np.bool_)
    epochs = np.lib.stride_tricks.sliding_window_view(y, length)[first[kept]]
    freq_hz, density = multitaper(epochs)
    whole = band_power(freq_hz, density, TOTAL_HZ)
    columns = {
        "band_power.delta": band_power(freq_hz, density, DELTA_HZ) / whole,
        "band_power.alpha": band_power(freq_hz, density, ALPHA_HZ) / whole,
        "spectral_edge": spectral_edge(freq_hz, density),
    }
    return Features(first / NEW_RATE_HZ, kept, columns)


def band_passed(x: Array, rate_hz: int) -> tuple[Array, int]:
    """Filter both ways, -3 dB at the cut-offs after both passes; also how long it rings."""
    # Each pass is wider than asked, so that two together have half the power at the cut-offs.
    wider = (np.sqrt(2) - 1) ** (1 / (2 * ORDER))
    low, high = np.tan(np.pi * np.array([HIGH_PASS_HZ, LOW_PASS_HZ]) / rate_hz)
    width = (high - low) / wider
    upper = (width + np.sqrt(width**2 + 4 * low * high)) / 2
    cutoffs_hz = rate_hz / np.pi * np.arctan([low * high / upper, upper])
    sos = signal.butter(ORDER, cutoffs_hz, "bandpass", fs=rate_hz, output="sos")
    impulse = np.zeros(120 * rate_hz)
    impulse[impulse.size // 2] = 1
    response = signal.sosfiltfilt(sos, impulse)[impulse.size // 2 + 1 :]
    tail = np.cumsum(np.abs(response[::-1]))[::-1]
    # Samples until 1 % is left, to a thousandth of it: the stage's rule, for the same padding.
    ringing = int(np.count_nonzero(tail > 0.01 * (1 - 1e-3)))
    return signal.sosfiltfilt(sos, x, padtype="odd", padlen=ringing), ringing


def resampled(x: Array, rate_hz: int) -> tuple[Array, int]:
    """Resample by a Kaiser-windowed low-pass; also half its length, samples of ``x``."""
    down = rate_hz // NEW_RATE_HZ
    window: Any = kernel(down)
    return np.asarray(signal.resample_poly(x, 1, down, window=window)), window.size // 2


def kernel(down: int) -> Array:
    """Return the anti-alias kernel for a rate that is divided."""
    asked_db = ATTENUATION_DB + 1.5  # Kaiser's formulas fall a little short
    order = np.ceil((asked_db - 8) / (2.285 * np.pi * TRANSITION / down))
    taps = 2 * int(-(-order // 2)) + 1
    window: Any = ("kaiser", 0.1102 * (asked_db - 8.7))
    return np.asarray(signal.firwin(taps, (1 - TRANSITION / 2) / down, window=window))


def too_large(y: Array) -> NDArray[np.bool_]:
    """Mask every window in which the signal goes up and down by more than the range."""
    width = WINDOW_S * NEW_RATE_HZ
    ahead = -(width // 2)  # a window is told by its first sample
    highest = ndimage.maximum_filter1d(y, width, origin=ahead)
    swing = highest - ndimage.minimum_filter1d(y, width, origin=ahead)
    beyond = np.flatnonzero(swing[: y.size - width + 1] > RANGE_UV)
    masked = np.zeros(y.size, bool)
    for start in beyond:
        masked[start : start + width] = True
    return masked


def multitaper(epochs: Array) -> tuple[Array, Array]:
    """Return bins and the one-sided density of each epoch."""
    length = epochs.shape[-1]
    time_bandwidth = HALF_BANDWIDTH_HZ * EPOCH_S
    tapers = signal.windows.dpss(length, time_bandwidth, int(2 * time_bandwidth) - 1)
    level = epochs - epochs.mean(axis=-1, keepdims=True)
    spectra = np.abs(fft.rfft(level[:, None, :] * tapers)) ** 2
    density = 2 * spectra.mean(axis=1) / NEW_RATE_HZ
    density[:, [0, -1]] /= 2
    return fft.rfftfreq(length, 1 / NEW_RATE_HZ), density


def band_power(freq_hz: Array, density: Array, band_hz: tuple[float, float]) -> Array:
    """Sum the bins from the lower limit up to, not on, the upper one."""
    inside = (freq_hz >= band_hz[0]) & (freq_hz < band_hz[1])
    return np.asarray(density[:, inside].sum(axis=-1) * freq_hz[1])


def spectral_edge(freq_hz: Array, density: Array) -> Array:
    """Return the frequency below which a share of the power lies; bins are boxes."""
    low_hz, high_hz = EDGE_WITHIN_HZ
    borders = np.clip(np.append(freq_hz - freq_hz[1] / 2, freq_hz[-1]), low_hz, high_hz)
    power = np.cumsum(density * np.diff(borders), axis=-1)
    wanted = EDGE_SHARE * power[:, -1:]
    box = np.sum(power < wanted, axis=-1)
    row = np.arange(box.size)
    before = np.where(box > 0, power[row, box - 1], 0.0)
    share = (wanted[:, 0] - before) / (power[row, box] - before)
    return np.asarray(borders[box] + share * (borders[box + 1] - borders[box]))


if __name__ == "__main__":
    found = features_of_file(Path(sys.argv[1]))
    print(f"{found.kept.sum()} of {found.kept.size} epochs kept")
    for name, values in found.columns.items():
        print(f"{name:20} mean {values.mean():.6g}")
