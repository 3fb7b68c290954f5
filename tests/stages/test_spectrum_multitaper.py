"""The multitaper estimate and Slepian's tapers."""

import os
import subprocess
import sys
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spectrum_epochs import Found, epochs_of, epochs_spec, params_of
from waveassay_stages.spectrum import multitaper as stage
from waveassay_stages.spectrum._slepian import slepian_tapers


@pytest.mark.parametrize("weights", ["equal", "eigenvalue"])
@pytest.mark.parametrize(
    ("n", "time_bandwidth", "count"), [(100, 2.0, 3), (151, 3.0, 5), (128, 2.5, 4), (96, 8.0, 15)]
)
def test_agrees_with_a_transcription_of_the_formula(
    n: int, time_bandwidth: float, count: int, weights: stage.Weights
) -> None:
    """Thomson 1982, by the plain sum, on tapers from another implementation; within 1e-10."""
    from scipy.signal.windows import dpss

    rate = 50.0
    x = np.random.default_rng(n).normal(0, 30, (2, n))
    tapers, ratios = dpss(n, time_bandwidth, count, return_ratios=True)
    d = np.ones(count) if weights == "equal" else ratios
    expected = np.zeros((2, n // 2 + 1))
    for r in range(2):
        for q in range(n // 2 + 1):
            turn = np.exp(-2j * np.pi * q * np.arange(n) / n)
            sides = 1 if q == 0 or 2 * q == n else 2
            for k in range(count):
                energy = abs(np.sum(tapers[k] * (x[r] - np.mean(x[r])) * turn)) ** 2
                expected[r, q] += sides * d[k] / np.sum(d) * energy / rate
    _, found = stage.multitaper(
        x,
        rate,
        half_bandwidth_hz=Fraction(time_bandwidth) * 50 / n,
        tapers=count,
        weights=weights,
    )
    np.testing.assert_allclose(found, expected, rtol=1e-10)


@settings(deadline=None)
@given(
    freq_hz=st.floats(10, 50),
    phase=st.floats(0, 6.3),
    amplitude=st.floats(0.1, 100),
    time_bandwidth=st.sampled_from((2, 3, 4)),
)
def test_half_a_squared_amplitude_lies_under_a_tone_for_every_taper(
    freq_hz: float, phase: float, amplitude: float, time_bandwidth: int
) -> None:
    """Exactly, on average over a phase and its quadrature: each taper has unit energy."""
    n, rate = 512, 128
    angle = 2 * np.pi * freq_hz * np.arange(n) / rate + phase
    x = amplitude * np.stack((np.cos(angle), np.sin(angle)))
    total = 0.0
    for count in range(1, 2 * time_bandwidth):
        axis, density = stage.multitaper(
            x,
            rate,
            half_bandwidth_hz=Fraction(time_bandwidth * rate, n),
            tapers=count,
            detrend="none",
        )
        sum_of_tapers = float(np.mean(np.sum(density, axis=-1))) * float(axis[1]) * count
        assert sum_of_tapers - total == pytest.approx(amplitude**2 / 2, rel=1e-9)
        total = sum_of_tapers


@settings(deadline=None, max_examples=30)
@given(
    n=st.integers(16, 400),
    twice_time_bandwidth=st.integers(2, 14),
)
def test_tapers_are_what_they_are_defined_as(n: int, twice_time_bandwidth: int) -> None:
    """Orthonormal eigenvectors of Slepian's concentration kernel (1978, eq. 13), signs as his."""
    count = max(1, twice_time_bandwidth - 1)
    time_bandwidth = Fraction(twice_time_bandwidth, 2)
    v, concentrations = slepian_tapers(n, time_bandwidth, count)
    np.testing.assert_allclose(v @ v.T, np.eye(count), atol=1e-11)
    lag = np.subtract.outer(np.arange(n), np.arange(n))
    width = float(2 * time_bandwidth / n)
    kernel = width * np.sinc(width * lag)
    np.testing.assert_allclose(v @ kernel, concentrations[:, None] * v, atol=1e-11)
    assert np.all(np.diff(concentrations) < 1e-11)
    for k in range(count):
        np.testing.assert_array_equal(v[k], v[k, ::-1] * (-1) ** k)
        if k % 2 == 0:
            assert np.sum(v[k]) > 0
        else:
            assert np.sum(v[k] * (n - 1 - 2 * np.arange(n))) > 0


def test_tapers_have_the_same_bits_on_other_kernels() -> None:
    """The kernels of the linear algebra library may differ between machines; the tapers do not."""
    program = (
        "import hashlib; from fractions import Fraction as F;"
        "from waveassay_stages.spectrum._slepian import slepian_tapers as s;"
        "d = hashlib.sha256();"
        "[d.update(a.tobytes()) for n, w, k in ((512, F(3), 5), (500, F(5, 2), 4), (1024, F(4), 7))"
        " for a in s(n, w, k)];"
        "print(d.hexdigest())"
    )
    digests = {
        subprocess.run(
            [sys.executable, "-c", program],
            env={**os.environ, **environment},
            capture_output=True,
            text=True,
            check=True,
        ).stdout
        for environment in (
            {},
            {"OPENBLAS_CORETYPE": "Prescott", "OPENBLAS_NUM_THREADS": "1"},
        )
    }
    assert len(digests) == 1


@pytest.mark.parametrize(("time_bandwidth", "count"), [(0, 1), (8, 1), (3, 0), (3, 17)])
def test_impossible_tapers_are_an_error(time_bandwidth: int, count: int) -> None:
    with pytest.raises(ValueError, match=r"NW|tapers"):
        slepian_tapers(16, Fraction(time_bandwidth), count)


@pytest.mark.parametrize(
    ("half_bandwidth", "length_s", "expected"),
    [("0.75 Hz", 4.0, 5), ("0.25 Hz", 4.0, 1), ("0.3 Hz", 4.0, 1), ("0.7 Hz", 4.0, 4)],
)
def test_tapers_not_given(half_bandwidth: str, length_s: float, expected: int) -> None:
    """floor(2 NW) - 1, with NW an exact fraction: 0.7 x 4 x 2 is 5.6, 0.75 x 4 x 2 is 6."""
    params = params_of(stage.MultitaperParams, half_bandwidth=half_bandwidth)
    spectra = stage.run(params, epochs_of(np.random.default_rng(1).normal(size=512)))
    assert spectra.dof[0] == pytest.approx(2 * expected)


def test_exact_fractions_keep_the_last_taper() -> None:
    """0.1 Hz x 30 s is NW = 3 exactly: 5 tapers, where floats could say 2.9999 and 4."""
    params = params_of(stage.MultitaperParams, half_bandwidth="0.1 Hz", tapers=5)
    found = Found()
    stage.spec(params, epochs_spec(30.0, 128), found.findings)
    assert found.errors == []


def test_a_length_that_no_float_holds_keeps_its_last_taper() -> None:
    """8 samples at 3 Hz are 8/3 s; 1.125 Hz times that is NW = 3 exactly: 5 tapers."""
    params = params_of(stage.MultitaperParams, half_bandwidth="1.125 Hz", tapers=5)
    length_s = 8 / 3
    assert Fraction(repr(length_s)) < Fraction(8, 3)
    found = Found()
    stage.spec(params, epochs_spec(length_s, 3), found.findings)
    assert found.errors == []


def test_eigenvalue_weights_count_for_fewer_degrees_of_freedom() -> None:
    _, concentrations = slepian_tapers(512, Fraction(2), 3)
    weight = stage.taper_weights(concentrations, "eigenvalue")
    assert np.sum(weight) == pytest.approx(1)
    assert 5.9 < stage.degrees_of_freedom(weight) < 6
    assert stage.degrees_of_freedom(np.full(3, 1 / 3)) == pytest.approx(6)


def test_degrees_of_freedom_by_simulation() -> None:
    x = np.random.default_rng(7).normal(size=(8000, 128))
    v, concentrations = slepian_tapers(128, Fraction(2), 3)
    assert v.shape == (3, 128)
    _, density = stage.multitaper(x, 128, half_bandwidth_hz=2, weights="eigenvalue", detrend="none")
    inner = density[:, 4:-4]
    dof = np.mean(2 * np.mean(inner, axis=0) ** 2 / np.var(inner, axis=0))
    weight = stage.taper_weights(concentrations, "eigenvalue")
    assert stage.degrees_of_freedom(weight) == pytest.approx(dof, rel=0.02)


def found_for(parameters: dict[str, object], length_s: float, rate_hz: int | None) -> Found:
    found = Found()
    params = params_of(stage.MultitaperParams, **parameters)
    stage.spec(params, epochs_spec(length_s, rate_hz), found.findings)
    return found


def test_a_time_bandwidth_below_one_is_refused() -> None:
    ((at, message),) = found_for({"half_bandwidth": "0.2 Hz"}, 4.0, None).errors
    assert at == "half_bandwidth"
    assert "NW = 0.8" in message
    assert "0.25 Hz" in message
    assert found_for({"half_bandwidth": "0.25 Hz"}, 4.0, None).errors == []


def test_more_tapers_than_the_bandwidth_holds_are_refused() -> None:
    given = {"half_bandwidth": "0.75 Hz", "tapers": 6}
    ((at, message),) = found_for(given, 4.0, 128).errors
    assert at == "tapers"
    assert "6 tapers" in message
    assert "2 NW - 1 = 5" in message
    assert found_for({**given, "tapers": 5}, 4.0, 128).errors == []


def test_a_half_bandwidth_at_nyquist_is_refused() -> None:
    ((at, message),) = found_for({"half_bandwidth": "5 Hz"}, 4.0, 10).errors
    assert at == "half_bandwidth"
    assert "Nyquist frequency 5 Hz" in message


def test_resolution_needs_no_rate() -> None:
    found = Found()
    params = params_of(stage.MultitaperParams, half_bandwidth="0.75 Hz")
    spec = stage.spec(params, epochs_spec(4.0, None), found.findings)
    assert spec.resolution_hz == 1.5
    assert spec.bin_hz is None
