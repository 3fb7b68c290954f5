"""Resampling: exact times, nothing folded, masks and ends, odd rates."""

from fractions import Fraction
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import ValidationError

from signal_data import is_masked, masked_s, signal_of, spec_of, tone
from spectrum_epochs import Found
from waveassay.contract import Interval
from waveassay_stages.resample import ResampleParams, half_length_s, resample, run, spec


def params(**values: Any) -> ResampleParams:
    return ResampleParams.model_validate(values)


RATES = [(512, 128), (500, 128), (250, 200), (250, 256), (1000, 125), (128, 250)]


@pytest.mark.parametrize(("old", "new"), RATES)
def test_every_sample_lies_exactly_at_its_time(old: int, new: int) -> None:
    """What lies in the pass band is unchanged, without delay, to the ripple of 100 dB."""
    asked = params(rate=f"{new} Hz")
    factor = Fraction(new, old)
    top = 0.8 * min(old, new) / 2
    for freq_hz in (0.3, 0.5 * top, top):
        out = resample(tone(freq_hz, old, 20 * old), factor.numerator, factor.denominator, asked)
        assert out.size == 20 * new
        expected = tone(freq_hz, new, 20 * new)
        assert out[new:-new] == pytest.approx(expected[new:-new], abs=1.5e-5)


@pytest.mark.parametrize(("old", "new"), [(512, 128), (500, 128), (1000, 125), (250, 200)])
@pytest.mark.parametrize("attenuation", [60, 100, 140])
def test_what_would_fold_is_put_down_as_asked(old: int, new: int, attenuation: int) -> None:
    asked = params(rate=f"{new} Hz", attenuation=f"{attenuation} dB")
    factor = Fraction(new, old)
    for freq_hz in np.linspace(new / 2, old / 2 - 1, 12):
        wave = tone(float(freq_hz), old, 12 * old, 1.0)
        out = resample(wave, factor.numerator, factor.denominator, asked)
        assert np.max(np.abs(out[2 * new : -2 * new])) <= 1.001 * 10 ** (-attenuation / 20)


@pytest.mark.parametrize("edges", ["odd", "even", "constant"])
@pytest.mark.parametrize(("old", "new"), RATES)
@pytest.mark.parametrize("count", [1, 2, 7, 1000])
def test_a_constant_stays_one(edges: str, old: int, new: int, count: int) -> None:
    factor = Fraction(new, old)
    asked = params(rate=f"{new} Hz", edges=edges)
    out = resample(np.full(count, 80.0), factor.numerator, factor.denominator, asked)
    assert out.size == -(-count * new // old)
    assert out == pytest.approx(np.full(out.size, 80.0), rel=2e-5)


def test_the_same_rate_changes_nothing() -> None:
    x = np.random.default_rng(1).standard_normal(1000)
    given = signal_of(x, 128, masks=[(1, 2, "x")])
    out = run(params(rate="128 Hz"), given)
    assert np.array_equal(out.x, x)
    assert out.excluded == given.excluded
    assert spec(params(rate="128 Hz"), spec_of(128), Found().findings) == spec_of(128)


@settings(max_examples=30, deadline=None)
@given(
    st.sampled_from([(512, 128), (500, 128), (128, 250)]),
    st.integers(1500, 3000),
    st.integers(1, 80),
)
def test_no_sample_outside_the_masks_depends_on_what_is_masked(
    rates: tuple[int, int], start: int, length: int
) -> None:
    old, new = rates
    rng = np.random.default_rng(start)
    x = rng.standard_normal(5000)
    other = x.copy()
    other[start : start + length] += 1e6
    mask = (Fraction(start, old), Fraction(start + length, old))
    asked = params(rate=f"{new} Hz")
    clean = signal_of(x, old)
    one = run(asked, clean)
    dirty = run(asked, signal_of(other, old))
    half_s = half_length_s(asked, Fraction(old))
    times = np.array([one.time_s(i) for i in range(one.x.size)])
    outside = (times < mask[0] - half_s) | (times >= mask[1] + half_s)
    assert np.array_equal(one.x[outside], dirty.x[outside])
    assert not np.array_equal(one.x[~outside], dirty.x[~outside])


def test_masks_widen_by_the_kernel_and_the_ends_are_masked() -> None:
    asked = params(rate="128 Hz")
    half = half_length_s(asked, Fraction(512))
    assert 0.2 < half < 0.3
    given = signal_of(np.zeros(512 * 20), 512, masks=[(5, 6, "amplitude")], start_s=2)
    out = run(asked, given)
    assert out.rate_hz == 128
    assert masked_s(out, "amplitude") == [(float(5 - half), float(6 + half))]
    assert masked_s(out, "edge") == [(2.0, float(2 + half)), (float(22 - half), 22.0)]
    assert np.count_nonzero(~is_masked(out)) > 0


def test_a_part_must_begin_on_the_new_grid_which_begins_with_the_piece() -> None:
    whole = signal_of(np.zeros(2560), 512, start_s=Fraction(1, 3))
    good = whole.cut(whole.time_s(8), whole.piece.stop_s)
    assert run(params(rate="128 Hz"), good).start_s == whole.time_s(8)
    bad = whole.cut(whole.time_s(9), whole.piece.stop_s)
    with pytest.raises(ValueError, match="whole sample"):
        run(params(rate="128 Hz"), bad)


def test_parts_give_the_same_bits_as_the_whole() -> None:
    x = np.random.default_rng(2).standard_normal(50_000)
    whole = signal_of(x, 500)
    asked = params(rate="128 Hz")
    out = run(asked, whole)
    low, high = Fraction(25), Fraction(75)
    part = run(asked, whole.cut(low - 5, high + 5)).cut(low, high)
    assert part.piece == Interval(Fraction(0), Fraction(100))
    assert np.array_equal(part.x, out.cut(low, high).x)


def test_an_odd_rate_needs_a_nominal_one() -> None:
    rate = Fraction(499907, 1000)
    found = Found()
    spec(params(rate="128 Hz"), spec_of(rate), found.findings)
    assert [at for at, _ in found.errors] == ["rate"]
    assert "nominal_rate" in found.errors[0][1]
    found = Found()
    asked = params(rate="128 Hz", nominal_rate="500 Hz")
    out = spec(asked, spec_of(rate), found.findings)
    assert found.errors == []
    assert out.rate_hz == rate * 128 / 500
    ((at, message),) = found.warnings
    assert at == "nominal_rate"
    assert "-186 ppm" in message  # 499.907 / 500 - 1
    x = tone(10, float(rate), 20_000)
    result = run(asked, signal_of(x, rate))
    assert result.rate_hz == out.rate_hz
    # The wave keeps its frequency against the true time base.
    places = np.array([float(result.time_s(i)) for i in range(result.x.size)])
    wave = np.sin(2 * np.pi * 10 * places)
    assert result.x[200:-200] == pytest.approx(wave[200:-200], abs=2e-5)


@pytest.mark.parametrize("nominal", ["510 Hz", "250 Hz"])
def test_a_nominal_rate_must_be_near(nominal: str) -> None:
    found = Found()
    spec(params(rate="125 Hz", nominal_rate=nominal), spec_of(500), found.findings)
    assert [at for at, _ in found.errors] == ["nominal_rate"]


def test_a_round_nominal_rate_warns_of_nothing() -> None:
    found = Found()
    out = spec(params(rate="128 Hz", nominal_rate="512 Hz"), spec_of(512), found.findings)
    assert (found.errors, found.warnings) == ([], [])
    assert out.rate_hz == 128


@pytest.mark.parametrize(
    ("old", "new", "top"), [(512, 128, 51.2), (128, 256, 51.2), (500, 250, 100.0)]
)
def test_the_pass_band_ends_below_the_lower_nyquist(old: int, new: int, top: float) -> None:
    out = spec(params(rate=f"{new} Hz"), spec_of(old), Found().findings)
    assert out.pass_hz[0] is None
    assert out.pass_hz[1] == pytest.approx(top)
    narrower = spec(params(rate=f"{new} Hz"), spec_of(old).passing(0.5, 40, 1), Found().findings)
    assert narrower.pass_hz == (0.5, 40)


def test_before_a_recording_is_known_the_rate_is_that_asked() -> None:
    out = spec(params(rate="128 Hz"), spec_of(None), Found().findings)
    assert out.rate_hz == 128
    assert out.pass_hz == (None, 51.2)


@pytest.mark.parametrize("edges", ["odd", "even", "constant", "zero"])
def test_the_ends_are_continued_as_asked(edges: str) -> None:
    """Resampling the signal with its continuation written out by hand gives the same."""
    x = 5 + np.random.default_rng(3).standard_normal(600)
    asked = params(rate="125 Hz", edges=edges)
    pad = 200
    before, after = {
        "odd": (2 * x[0] - x[pad:0:-1], 2 * x[-1] - x[-2 : -pad - 2 : -1]),
        "even": (x[pad:0:-1], x[-2 : -pad - 2 : -1]),
        "constant": (np.full(pad, x[0]), np.full(pad, x[-1])),
        "zero": (np.zeros(pad), np.zeros(pad)),
    }[edges]
    longer = resample(np.concatenate((before, x, after)), 1, 4, asked)
    assert resample(x, 1, 4, asked) == pytest.approx(longer[pad // 4 : -pad // 4], abs=1e-12)


@pytest.mark.parametrize(
    "values",
    [
        {"rate": "0 Hz"},
        {"rate": "128 Hz", "attenuation": "20 dB"},
        {"rate": "128 Hz", "transition": "0 %"},
        {"rate": "128 Hz", "transition": "100 %"},
        {"rate": "128 Hz", "edges": "reflect"},
        {},
    ],
)
def test_unsound_parameters(values: dict[str, object]) -> None:
    with pytest.raises(ValidationError):
        params(**values)
