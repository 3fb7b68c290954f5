"""The recipe of the whole chain, in each precision, and one that shows its spectra bin by bin."""

from collections.abc import Mapping

#: What is measured: "standard" filters in float64 and transforms epochs in float32.
PRECISIONS = ("standard", "double")
#: What a run does that is not asked for a precision, as the command's users see it.
DEFAULT = PRECISIONS[0]

BANDS_HZ = {
    "delta": (0.5, 4),
    "theta": (4, 8),
    "alpha": (8, 13),
    "beta": (13, 30),
    "gamma": (30, 40),
}
TOTAL_HZ = (0.5, 40.0)
EDGE_HZ = (0.5, 30.0)
WELCH_BIN_HZ, MULTITAPER_BIN_HZ = 0.5, 0.25

_HEAD = """\
recipe: full-chain
edition: 1
title: The whole chain of the benchmarks
{precision}signals:
  eeg: {{labels: ["CH*"], many: true, unit: uV, modality: eeg}}
chains:
  cortex:
    - load: {{signals: [eeg]}}
    - filter.butterworth: {{high_pass: 0.5 Hz, low_pass: 40 Hz, order_per_pass: 4}}
    - filter.notch: {{line: 50 Hz}}
    - resample: {{rate: 128 Hz}}
    - exclude.amplitude: {{range: 300 uV, window: 1 s}}
    - epoch.consecutive: {{length: 4 s, overlap: 50 %}}
"""
_FEATURES = """\
    - spectrum.welch: {{segment: 2 s}}
    - feature.spectral_edge: {{fraction: 95 %, within: [0.5 Hz, 30 Hz]}}
      as: welch_edge
    - spectrum.multitaper: {{half_bandwidth: 0.75 Hz, tapers: 5}}
    - feature.band_power:
        bands: {bands}
    - feature.band_power:
        bands: {bands}
        express: relative
        relative_to: [0.5 Hz, 40 Hz]
      as: share
    - feature.spectral_edge: {{fraction: 95 %, within: [0.5 Hz, 40 Hz]}}
    - feature.spectral_edge: {{fraction: 50 %, within: [0.5 Hz, 40 Hz]}}
      as: median_frequency
    - feature.spectral_entropy: {{within: [0.5 Hz, 40 Hz]}}
    - export.table: {{csv: never}}
"""
# A band as wide as a bin holds that bin's density times its width.
_SPECTRA = """\
    - spectrum.welch: {{segment: 2 s}}
    - feature.band_power:
        bands: {welch}
      as: welch_bin
    - spectrum.multitaper: {{half_bandwidth: 0.75 Hz, tapers: 5}}
    - feature.band_power:
        bands: {multitaper}
      as: multitaper_bin
    - export.table: {{csv: never}}
"""


def chain(precision: str) -> str:
    """Return the recipe that is timed."""
    return _HEAD.format(precision=_key(precision)) + _FEATURES.format(bands=_bands(BANDS_HZ))


def spectra(precision: str) -> str:
    """Return a recipe with a column a bin of both spectra: ``multitaper_bin.b40`` is 10 Hz."""
    parts = {
        name: _bands({f"b{k}": (k * width, (k + 1) * width) for k in bins(width)})
        for name, width in (("welch", WELCH_BIN_HZ), ("multitaper", MULTITAPER_BIN_HZ))
    }
    return _HEAD.format(precision=_key(precision)) + _SPECTRA.format(**parts)


def bins(width_hz: float) -> range:
    """Return the numbers of the bins from 0.5 up to 40 Hz."""
    low_hz, high_hz = TOTAL_HZ
    return range(round(low_hz / width_hz), round(high_hz / width_hz))


def _bands(bands: Mapping[str, tuple[float, float]]) -> str:
    inside = ", ".join(f"{name}: [{low:g} Hz, {high:g} Hz]" for name, (low, high) in bands.items())
    return f"{{{inside}}}"


def _key(precision: str) -> str:
    if precision not in PRECISIONS:
        raise ValueError(f"{precision} is not measured, only {', '.join(PRECISIONS)}")
    return f"precision: {precision}\n"
