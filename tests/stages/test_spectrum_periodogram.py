"""The periodogram, and what all estimators share."""

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spectrum_epochs import Found, epochs_of, epochs_spec, params_of
from waveassay.contract import EachRow, Spectra
from waveassay_stages.spectrum import _density, multitaper, periodogram, welch
from waveassay_stages.spectrum._windows import (
    WINDOW_NAMES,
    WindowName,
    noise_bandwidth_bins,
    window,
)

STAGES = {
    "periodogram": (periodogram.STAGE, {"zero_padding": "twice", "detrend": "linear"}),
    "welch": (welch.STAGE, {"segment": "1 s", "overlap": "60 %"}),
    "welch median": (welch.STAGE, {"segment": "1.3 s", "average": "median"}),
    "multitaper": (multitaper.STAGE, {"half_bandwidth": "0.75 Hz"}),
    "multitaper weighted": (
        multitaper.STAGE,
        {"half_bandwidth": "1 Hz", "weights": "eigenvalue", "zero_padding": "next_power_of_two"},
    ),
}
SCIPY_NAMES: dict[str, Any] = {
    "rectangle": "boxcar",
    "hann": "hann",
    "hamming": "hamming",
    "blackman": "blackman",
    "blackman_harris": "blackmanharris",
    "nuttall": "nuttall",
    "tukey_50": ("tukey", 0.5),
    "tukey_10": ("tukey", 0.1),
}


def noise(n: int, seed: int = 1) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    return np.random.default_rng(seed).normal(5, 20, n)


def run(name: str, epochs: object) -> Spectra:
    stage, parameters = STAGES[name]
    assert stage.run is not None
    assert isinstance(stage.context, EachRow)
    spectra = stage.run(params_of(stage.params, **parameters), epochs)
    assert isinstance(spectra, Spectra)
    return spectra


@settings(deadline=None)
@given(
    n=st.integers(8, 600),
    seed=st.integers(0, 10**6),
    name=st.sampled_from(sorted(SCIPY_NAMES)),
    detrend=st.sampled_from(("none", "constant", "linear")),
)
def test_agrees_with_an_independent_periodogram(
    n: int, seed: int, name: WindowName, detrend: _density.Detrend
) -> None:
    from scipy import signal

    x = noise(n, seed)[None]
    without: Any = False if detrend == "none" else detrend  # the stubs misspell "linear"
    freq_hz, found = periodogram.periodogram(x, 250, window_name=name, detrend=detrend)
    expected_hz, expected = signal.periodogram(x, 250, window=SCIPY_NAMES[name], detrend=without)
    np.testing.assert_allclose(freq_hz, expected_hz, rtol=1e-15)
    np.testing.assert_allclose(found, expected, rtol=1e-11, atol=1e-12 * float(np.mean(expected)))


@settings(deadline=None)
@given(n=st.integers(8, 300), shift=st.integers(0, 300), seed=st.integers(0, 10**6))
def test_a_circular_shift_changes_nothing_under_a_rectangle(n: int, shift: int, seed: int) -> None:
    x = noise(n, seed)
    both = np.stack([x, np.roll(x, shift)])
    _, (one, other) = periodogram.periodogram(both, 128, window_name="rectangle")
    np.testing.assert_allclose(one, other, rtol=1e-9, atol=1e-11 * float(np.mean(one)))


@pytest.mark.parametrize("name", STAGES)
def test_twice_the_amplitude_is_four_times_the_power(name: str) -> None:
    x = noise(2048)
    once, twice = run(name, epochs_of(x)), run(name, epochs_of(2 * x))
    np.testing.assert_array_equal(twice.density, 4 * once.density)


@pytest.mark.parametrize("kind", [np.float32, np.float64])
@pytest.mark.parametrize("name", STAGES)
def test_rows_do_not_depend_on_each_other_or_on_blocks(
    name: str, kind: type[np.floating[Any]], monkeypatch: pytest.MonkeyPatch
) -> None:
    x = noise(128 * 300).astype(kind)
    whole = run(name, epochs_of(x))
    kept = np.random.default_rng(2).random(len(whole.rows)) < 0.4
    some = run(name, epochs_of(x, kept=list(kept)))
    np.testing.assert_array_equal(some.density[kept], whole.density[kept])
    assert np.all(np.isnan(some.density[~kept]))
    assert np.all(np.isnan(some.dof[~kept]))
    one = run(name, epochs_of(x[256 * 7 : 256 * 7 + 512]))
    np.testing.assert_array_equal(one.density[0], whole.density[7])
    # A part of the tapers of one row, all of them, several rows, all rows.
    for block in (1, 8192, 100_000, 10**9):
        monkeypatch.setattr(_density, "BLOCK_BYTES", block)
        np.testing.assert_array_equal(run(name, epochs_of(x)).density, whole.density)


@pytest.mark.parametrize("name", STAGES)
def test_input_is_left_alone(name: str) -> None:
    x = noise(2048)
    before = x.copy()
    run(name, epochs_of(x))
    np.testing.assert_array_equal(x, before)


@pytest.mark.parametrize("name", STAGES)
def test_no_epoch_kept_or_no_epoch_at_all(name: str) -> None:
    none_kept = run(name, epochs_of(noise(1024), kept=[False] * 3))
    assert np.all(np.isnan(none_kept.density))
    assert len(none_kept.rows) == 3
    none = run(name, epochs_of(noise(100)))
    assert none.density.shape == (0, none.freq_hz.size)


@pytest.mark.parametrize("name", STAGES)
def test_what_comes_out_is_what_the_spec_says(name: str) -> None:
    stage, parameters = STAGES[name]
    found = Found()
    params = params_of(stage.params, **parameters)
    spec = stage.spec(params, epochs_spec(4.0, 128), found.findings)
    assert not found.errors
    spectra = run(name, epochs_of(noise(1024)))
    assert spectra.resolution_hz == spec.resolution_hz  # type: ignore[union-attr]
    assert spectra.bin_hz == spec.bin_hz  # type: ignore[union-attr]
    assert spectra.freq_hz[-1] == spec.top_hz  # type: ignore[union-attr]
    assert spectra.freq_hz[0] == 0
    assert np.diff(spectra.freq_hz) == pytest.approx(spectra.bin_hz, rel=1e-12)


@pytest.mark.parametrize("detrend", ["constant", "linear"])
def test_detrending_takes_out_what_it_says(detrend: _density.Detrend) -> None:
    t = np.arange(257.0)
    x = np.stack([np.full(257, 1e4), 1e4 - 3 * t])
    _, (flat, slope) = periodogram.periodogram(x, 128, detrend=detrend)
    assert np.max(flat) == 0
    assert (np.max(slope) < 1e-20) == (detrend == "linear")


@pytest.mark.parametrize(("padding", "step"), [("twice", 2), ("four_times", 4)])
def test_padding_adds_bins_and_changes_none(padding: _density.ZeroPadding, step: int) -> None:
    x = noise(500)[None]
    freq_hz, plain = periodogram.periodogram(x, 250)
    more_hz, padded = periodogram.periodogram(x, 250, zero_padding=padding)
    np.testing.assert_array_equal(more_hz[::step], freq_hz)
    # the last bin of the plain transform is its Nyquist frequency, as that of the padded one
    np.testing.assert_allclose(padded[:, ::step], plain, rtol=1e-9, atol=1e-9)


def test_padding_to_a_power_of_two() -> None:
    lengths = [_density.transform_length(n, "next_power_of_two") for n in (8, 9, 500, 512, 513)]
    assert lengths == [8, 16, 512, 512, 1024]


def test_bins_are_rounded_once() -> None:
    freq_hz = _density.bin_centres_hz(_density.as_rate(100), 1000)
    assert [float(f) for f in freq_hz[[3, 7, 500]]] == [0.3, 0.7, 50.0]


@pytest.mark.parametrize("name", WINDOW_NAMES)
def test_windows_are_periodic(name: WindowName) -> None:
    for n in (16, 33):
        w = window(name, n)
        np.testing.assert_allclose(w[1:], w[:0:-1], rtol=0, atol=1e-15)
        assert np.max(w) == pytest.approx(np.max(window(name, 2 * n)), rel=0.1)


def test_windows_refuse_nonsense() -> None:
    with pytest.raises(ValueError, match="hann"):
        window("hanning", 16)
    with pytest.raises(ValueError, match="at least one"):
        window("hann", 0)


@pytest.mark.parametrize("name", WINDOW_NAMES)
def test_resolution_is_the_noise_bandwidth(name: WindowName) -> None:
    """White noise of variance 1 through a window has the power of a band of that width."""
    x = np.random.default_rng(9).normal(size=(4000, 64))
    w = window(name, 64)
    power = np.mean(np.sum(x * w, axis=-1) ** 2) / np.sum(w) ** 2  # of a two-sided density of 1
    assert power * 64 == pytest.approx(noise_bandwidth_bins(w), rel=0.1)


def test_a_short_epoch_is_refused_with_what_would_do() -> None:
    found = Found()
    params = periodogram.STAGE.params()
    periodogram.STAGE.spec(params, epochs_spec(0.05, 100), found.findings)
    ((at, message),) = found.errors
    assert at == ""
    assert "5 samples" in message
    assert "at least 0.08 s" in message


def test_an_unknown_rate_leaves_open_what_it_decides() -> None:
    found = Found()
    spec = periodogram.spec(periodogram.PeriodogramParams(), epochs_spec(4.0, None), found.findings)
    assert (spec.resolution_hz, spec.bin_hz, spec.top_hz) == (None, None, None)
    assert spec.window_s == 4.0
    assert not found.errors


def test_an_odd_transform_has_no_bin_at_nyquist() -> None:
    found = Found()
    spec = periodogram.spec(periodogram.PeriodogramParams(), epochs_spec(1.0, 101), found.findings)
    assert spec.top_hz == 50.0
