"""The whole chain as a researcher would write it by hand, with loops or on whole arrays.

``python full_script.py loop|vectorised RECORDING TABLE.csv`` does what the recipe of
`full_recipe.py` asks for, on all of the recording at once, and writes a row an epoch. It shares no
code with the stages. Resampling is scipy's as it comes, with a shorter kernel than the stage's:
cheaper, and right to a thousandth.
"""

import csv
import json
import sys
import time
from collections.abc import Iterable
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import fft, ndimage, signal

RATE_HZ, NEW_RATE_HZ = 512, 128
HIGH_PASS_HZ, LOW_PASS_HZ, ORDER = 0.5, 40.0, 4
LINE_HZ, LINE_WIDTH_HZ = 50.0, 2.0
RANGE_UV, WINDOW = 300.0, NEW_RATE_HZ
LENGTH, STEP, SEGMENT = 4 * NEW_RATE_HZ, 2 * NEW_RATE_HZ, 2 * NEW_RATE_HZ
TIME_BANDWIDTH, TAPERS = 3, 5
BANDS_HZ = {
    "delta": (0.5, 4),
    "theta": (4, 8),
    "alpha": (8, 13),
    "beta": (13, 30),
    "gamma": (30, 40),
}
COLUMNS = (
    "welch_edge",
    *(f"band_power.{name}" for name in BANDS_HZ),
    *(f"share.{name}" for name in BANDS_HZ),
    "spectral_edge",
    "median_frequency",
    "spectral_entropy",
)

Array = NDArray[np.float64]
# What `firwin` would make, or how to make it: `resample_poly` takes both.
Kernel = Any
SCIPYS_OWN: Kernel = ("kaiser", 5.0)


def read(path: Path) -> Array:
    """Return all channels, in microvolts."""
    import pyedflib

    with pyedflib.EdfReader(str(path)) as file:
        return np.array([file.readSignal(i) for i in range(file.signals_in_file)])


def cleaned(x: Array, kernel: Kernel = SCIPYS_OWN) -> Array:
    """Band-pass and notch both ways, then resample; along the last axis."""
    x = signal.sosfiltfilt(band_pass(), x, axis=-1)
    x = signal.filtfilt(*notch(), x, axis=-1)
    return np.asarray(signal.resample_poly(x, NEW_RATE_HZ, RATE_HZ, axis=-1, window=kernel))


def band_pass() -> Array:
    """Return sections of half the power at the cut-offs after both passes."""
    wider = (np.sqrt(2) - 1) ** (1 / (2 * ORDER))
    low, high = np.tan(np.pi * np.array([HIGH_PASS_HZ, LOW_PASS_HZ]) / RATE_HZ)
    width = (high - low) / wider
    upper = (width + np.sqrt(width**2 + 4 * low * high)) / 2
    cutoffs_hz = RATE_HZ / np.pi * np.arctan([low * high / upper, upper])
    return np.asarray(signal.butter(ORDER, cutoffs_hz, "bandpass", fs=RATE_HZ, output="sos"))


def notch() -> tuple[Array, Array]:
    """Return coefficients of a notch whose width holds after both passes."""
    once = np.tan(np.pi * LINE_WIDTH_HZ / RATE_HZ) * np.sqrt(np.sqrt(2) - 1)
    width_hz = RATE_HZ / np.pi * np.arctan(once)
    return signal.iirnotch(LINE_HZ, LINE_HZ / width_hz, fs=RATE_HZ)


def too_large(x: Array) -> NDArray[np.bool_]:
    """Mask every second in which a channel goes up and down by more than the range."""
    ahead = -(WINDOW // 2)  # a window is told by its first sample
    swing = ndimage.maximum_filter1d(x, WINDOW, axis=-1, origin=ahead)
    swing -= ndimage.minimum_filter1d(x, WINDOW, axis=-1, origin=ahead)
    masked = np.zeros(x.shape, np.bool_)
    last = x.shape[-1] - WINDOW
    for place in zip(*np.nonzero(swing[..., : last + 1] > RANGE_UV), strict=True):
        masked[(*place[:-1], slice(place[-1], place[-1] + WINDOW))] = True
    return masked


@lru_cache(maxsize=1)
def tapers() -> Array:
    """Return the tapers, which are made once."""
    return np.asarray(signal.windows.dpss(LENGTH, TIME_BANDWIDTH, TAPERS))


def multitaper(epochs: Array) -> tuple[Array, Array]:
    """Return bins and the one-sided density of epochs along the last axis."""
    level = epochs - epochs.mean(axis=-1, keepdims=True)
    total = np.zeros((*epochs.shape[:-1], LENGTH // 2 + 1))
    for taper in tapers():
        total += np.abs(fft.rfft(level * taper, axis=-1)) ** 2
    total *= 2 / (TAPERS * NEW_RATE_HZ)
    total[..., [0, -1]] /= 2
    return fft.rfftfreq(LENGTH, 1 / NEW_RATE_HZ), total


def welch(epochs: Array) -> tuple[Array, Array]:
    """Return bins and the one-sided density of epochs along the last axis."""
    freq_hz, density = signal.welch(epochs, NEW_RATE_HZ, nperseg=SEGMENT, axis=-1)
    return np.asarray(freq_hz), np.asarray(density)


def edge_hz(freq_hz: Array, density: Array, share: float, low_hz: float, high_hz: float) -> Array:
    """Return the frequency below which a share of the power lies; bins are boxes."""
    borders = np.clip(np.append(freq_hz - freq_hz[1] / 2, freq_hz[-1]), low_hz, high_hz)
    power = np.cumsum(density * np.diff(borders), axis=-1)
    if density.ndim == 1:
        return np.asarray(np.interp(share * power[-1], np.insert(power, 0, 0.0), borders))
    wanted = share * power[..., -1:]
    box = np.sum(power < wanted, axis=-1, keepdims=True)
    before = np.where(box > 0, np.take_along_axis(power, np.maximum(box - 1, 0), -1), 0.0)
    part = (wanted - before) / (np.take_along_axis(power, box, -1) - before)
    return np.asarray((borders[box] + part * (borders[box + 1] - borders[box]))[..., 0])


def features(both: tuple[tuple[Array, Array], tuple[Array, Array]]) -> list[Array]:
    """Return the features of `COLUMNS`, given Welch's estimate and the multitaper one."""
    (welch_hz, welch_density), (freq_hz, density) = both
    inside = (freq_hz >= 0.5) & (freq_hz < 40)
    power = [
        density[..., (freq_hz >= low) & (freq_hz < high)].sum(axis=-1) * freq_hz[1]
        for low, high in BANDS_HZ.values()
    ]
    total = density[..., inside].sum(axis=-1) * freq_hz[1]
    p = density[..., inside] / density[..., inside].sum(axis=-1, keepdims=True)
    return [
        edge_hz(welch_hz, welch_density, 0.95, 0.5, 30),
        *power,
        *(one / total for one in power),
        edge_hz(freq_hz, density, 0.95, 0.5, 40),
        edge_hz(freq_hz, density, 0.5, 0.5, 40),
        -np.sum(p * np.log(p), axis=-1) / np.log(np.count_nonzero(inside)),
    ]


def vectorised(path: Path, table: Path) -> None:
    """Do it on whole arrays."""
    y = cleaned(read(path))
    epochs, kept = cut(y)
    found = features((welch(epochs), multitaper(epochs)))
    channel, number = np.indices(kept.shape)
    columns: list[Any] = [channel, number * STEP / NEW_RATE_HZ, kept, *found]
    write(table, zip(*(column.ravel().tolist() for column in columns), strict=True))


def cut(y: Array) -> tuple[Array, NDArray[np.bool_]]:
    """Return epochs as a view, shape (channels, epochs, samples), and which are kept."""
    windows = np.lib.stride_tricks.sliding_window_view
    touched = windows(too_large(y), LENGTH, axis=-1)[:, ::STEP].any(axis=-1)
    return windows(y, LENGTH, axis=-1)[:, ::STEP], np.asarray(~touched, np.bool_)


def loop(path: Path, table: Path) -> None:
    """Do it channel by channel, and epoch by epoch."""
    rows = []
    for channel, x in enumerate(read(path)):
        y = cleaned(x)
        masked = too_large(y)
        for start in range(0, y.size - LENGTH + 1, STEP):
            epoch = y[start : start + LENGTH]
            kept = not masked[start : start + LENGTH].any()
            found = features((welch(epoch), multitaper(epoch)))
            rows.append([channel, start / NEW_RATE_HZ, kept, *map(float, found)])
    write(table, rows)


def write(table: Path, rows: Iterable[Iterable[object]]) -> None:
    """Write a row an epoch."""
    with table.open("w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file)
        writer.writerow(["channel", "start_s", "kept", *COLUMNS])
        writer.writerows(rows)


if __name__ == "__main__":
    way, recording, into = sys.argv[1:]
    begun_s = time.process_time()
    {"loop": loop, "vectorised": vectorised}[way](Path(recording), Path(into))
    print(json.dumps({"cpu_s": time.process_time() - begun_s}))
