"""Welch's estimate."""

from fractions import Fraction
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import ValidationError

from spectrum_epochs import Found, epochs_of, epochs_spec, params_of
from waveassay_stages.spectrum import welch as stage
from waveassay_stages.spectrum._density import Detrend, ZeroPadding, transform_length
from waveassay_stages.spectrum._windows import WindowName
from waveassay_stages.spectrum.periodogram import periodogram

WINDOWS = ("hann", "hamming", "blackman", "blackman_harris", "nuttall", "rectangle")


@settings(deadline=None)
@given(
    segment=st.integers(8, 300),
    more=st.integers(0, 700),
    overlap=st.sampled_from((0.0, 0.1, 0.25, 0.5, 0.62, 0.75, 0.9)),
    window=st.sampled_from(WINDOWS),
    detrend=st.sampled_from(("none", "constant", "linear")),
    average=st.sampled_from(("mean", "median")),
    padding=st.sampled_from(("none", "next_power_of_two", "twice", "four_times")),
    seed=st.integers(0, 10**6),
)
def test_agrees_with_scipy(
    segment: int,
    more: int,
    overlap: float,
    window: WindowName,
    detrend: Detrend,
    average: stage.Average,
    padding: ZeroPadding,
    seed: int,
) -> None:
    """Within 1e-12 of the mean density, at every bin."""
    from scipy import signal

    x = np.random.default_rng(seed).normal(0, 20, (3, segment + more))
    without: Any = False if detrend == "none" else detrend  # the stubs misspell "linear"
    freq_hz, found = stage.welch(
        x,
        250,
        segment=segment,
        overlap=overlap,
        window_name=window,
        detrend=detrend,
        average=average,
        zero_padding=padding,
    )
    expected_hz, expected = signal.welch(
        x,
        250,
        window={"rectangle": "boxcar", "blackman_harris": "blackmanharris"}.get(window, window),
        nperseg=segment,
        noverlap=segment - stage.segment_starts(segment, segment, overlap).step,
        nfft=transform_length(segment, padding),
        detrend=without,
        average=average,
    )
    np.testing.assert_allclose(freq_hz, expected_hz, rtol=1e-15)
    np.testing.assert_allclose(found, expected, rtol=0, atol=1e-12 * float(np.mean(expected)))


@settings(deadline=None)
@given(overlap=st.sampled_from((0.0, 0.3, 0.5, 0.75)), seed=st.integers(0, 10**6))
def test_relative_agreement_with_scipy_at_every_bin_of_white_noise(
    overlap: float, seed: int
) -> None:
    """Within 1e-12 of the density itself, where it is not next to nothing (0 Hz)."""
    from scipy import signal

    x = np.random.default_rng(seed).normal(0, 20, (4, 2048))
    _, found = stage.welch(x, 128, segment=256, overlap=overlap)
    _, expected = signal.welch(x, 128, nperseg=256, noverlap=int(overlap * 256))
    np.testing.assert_allclose(found[:, 1:], expected[:, 1:], rtol=1e-12)


def test_one_segment_is_a_periodogram() -> None:
    x = np.random.default_rng(3).normal(size=(5, 300))
    np.testing.assert_array_equal(
        stage.welch(x, 100, segment=300)[1], periodogram(x, 100, window_name="hann")[1]
    )


def test_a_tone_moves_no_power_with_the_start() -> None:
    """Half a squared amplitude lies under a tone, wherever the segment begins."""
    t = np.arange(4000) / 100
    x = 6 * np.cos(2 * np.pi * 12.3 * t[:, None] + np.linspace(0, 6, 7)).T
    freq_hz, density = stage.welch(x, 100, segment=400)
    np.testing.assert_allclose(np.sum(density, axis=-1) * freq_hz[1], 18, rtol=1e-3)


@pytest.mark.parametrize("overlap", [0.0, 0.5])
@pytest.mark.parametrize("segments", [3, 4, 15])
def test_median_is_unbiased_and_its_degrees_of_freedom_hold(overlap: float, segments: int) -> None:
    hop = round(64 * (1 - overlap))
    samples = 64 + (segments - 1) * hop
    x = np.random.default_rng(segments).normal(size=(6000, samples))
    _, density = stage.welch(x, 2.0, segment=64, overlap=overlap, average="median", detrend="none")
    inner = density[:, 2:-2]
    assert np.mean(inner) == pytest.approx(1, abs=0.012 if overlap == 0 else 0.03)
    dof = np.mean(2 * np.mean(inner, axis=0) ** 2 / np.var(inner, axis=0))
    predicted = stage.degrees_of_freedom(samples, 64, overlap, "hann", "median")
    assert predicted == pytest.approx(dof, rel=0.04 if overlap == 0 else 0.08)


@settings(deadline=None)
@given(segments=st.integers(1, 40), overlap=st.sampled_from((0.0, 0.5, 0.75)))
def test_degrees_of_freedom_lie_between_one_segment_and_all(segments: int, overlap: float) -> None:
    hop = round(64 * (1 - overlap))
    dof = stage.degrees_of_freedom(64 + (segments - 1) * hop, 64, overlap, "hann")
    assert 2 * (1 - 1e-12) <= dof <= 2 * segments * (1 + 1e-12)
    if overlap == 0:
        assert dof == pytest.approx(2 * segments)


def test_segments_shared_by_overlapping_epochs_make_no_difference() -> None:
    x = np.random.default_rng(4).normal(size=128 * 60)
    params = params_of(stage.WelchParams, segment="1 s", overlap="50 %")
    together = stage.run(params, epochs_of(x, length=512, hop=64))
    for i in (0, 5, len(together.rows) - 1):
        alone = stage.run(params, epochs_of(x[64 * i : 64 * i + 512]))
        np.testing.assert_array_equal(alone.density[0], together.density[i])


def test_a_row_shorter_than_a_segment_is_an_error() -> None:
    with pytest.raises(ValueError, match="does not fit"):
        stage.welch(np.zeros((1, 50)), 100, segment=51)


def refused(parameters: dict[str, str], length_s: float, rate_hz: int | None) -> list[str]:
    found = Found()
    params = params_of(stage.WelchParams, **parameters)
    stage.spec(params, epochs_spec(length_s, rate_hz), found.findings)
    assert all(at == "segment" for at, _ in found.errors)
    return [message for _, message in found.errors]


@pytest.mark.parametrize("rate_hz", [128, None])
def test_a_segment_longer_than_the_epoch_is_refused(rate_hz: int | None) -> None:
    (message,) = refused({"segment": "5 s"}, 4.0, rate_hz)
    assert "5 s" in message
    assert "4 s" in message
    assert refused({"segment": "4 s"}, 4.0, rate_hz) == []


def test_a_segment_as_long_as_the_epoch_fits_after_rounding() -> None:
    """1 s at 1000/3 Hz is 333 samples, 0.999 s, for the epoch and the segment alike."""
    found = Found()
    params = params_of(stage.WelchParams, segment="1 s")
    stage.spec(params, epochs_spec(0.999, Fraction(1000, 3)), found.findings)
    assert found.errors == []


def test_a_segment_of_few_samples_is_refused() -> None:
    (message,) = refused({"segment": "50 ms"}, 4.0, 100)
    assert "5 samples" in message


def test_what_segments_leave_unused_is_said() -> None:
    found = Found()
    params = params_of(stage.WelchParams, segment="1.5 s", overlap="50 %")
    stage.spec(params, epochs_spec(4.0, 128), found.findings)
    ((at, message),) = found.warnings
    assert at == "segment"
    assert "the last 0.25 s" in message
    found = Found()
    params = params_of(stage.WelchParams, segment="2 s")
    stage.spec(params, epochs_spec(4.0, 128), found.findings)
    assert found.warnings == []


@pytest.mark.parametrize(
    "parameters",
    [{}, {"segment": "0 s"}, {"segment": "2"}, {"segment": "2 s", "overlap": "100 %"}],
)
def test_unsound_parameters_are_refused(parameters: dict[str, str]) -> None:
    with pytest.raises(ValidationError):
        params_of(stage.WelchParams, **parameters)
