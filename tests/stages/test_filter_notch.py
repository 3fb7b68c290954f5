"""The notch: its width after all passes, its harmonics, its masks."""

from fractions import Fraction
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import ValidationError

from signal_data import is_masked, masked_s, signal_of, spec_of, tone
from spectrum_epochs import Found
from waveassay_stages.filter.notch import (
    NotchParams,
    design,
    gain_at,
    notch,
    notched_hz,
    response_s,
    run,
    spec,
)


def params(**values: Any) -> NotchParams:
    return NotchParams.model_validate(values)


def half_power_hz(asked: NotchParams, rate_hz: float, line_hz: float) -> tuple[float, float]:
    """Return where the gain crosses half the power, on either side of the line, by bisection."""
    found = []
    for side in (-1.0, 1.0):
        near, far = 0.0, asked.width
        for _ in range(60):
            middle = (near + far) / 2
            below = float(gain_at(asked, rate_hz, line_hz + side * middle)) < 0.5**0.5
            near, far = (middle, far) if below else (near, middle)
        found.append(line_hz + side * near)
    return found[0], found[1]


@pytest.mark.parametrize("passes", ["both_ways", "forward"])
@pytest.mark.parametrize("width", [0.5, 2.0, 5.0])
@pytest.mark.parametrize("line", [50, 60])
def test_the_width_is_as_asked_after_all_passes(passes: str, width: float, line: int) -> None:
    asked = params(line=f"{line} Hz", width=f"{width} Hz", passes=passes)
    low, high = half_power_hz(asked, 250, line)
    assert high - low == pytest.approx(width, rel=1e-9)
    # Their tangents lie around the line's by the geometric mean (bilinear transform).
    lower, middle, upper = (np.tan(np.pi * f / 250) for f in (low, line, high))
    assert lower * upper == pytest.approx(middle**2, rel=1e-9)
    assert float(gain_at(asked, 250, line)) < 1e-12
    assert float(gain_at(asked, 250, 0)) == pytest.approx(1, rel=1e-12)


@pytest.mark.parametrize("passes", ["both_ways", "forward"])
def test_line_and_harmonics_are_gone_and_the_rest_stays(passes: str) -> None:
    rate, count = 1000, 20000
    hum = sum((tone(50 * k, rate, count, k) for k in range(1, 10)), np.zeros(count))
    asked = params(line="50 Hz", harmonics="all", passes=passes)
    assert notched_hz(asked, rate) == tuple(50.0 * k for k in range(1, 10))
    middle = slice(count // 3, -count // 3)
    assert np.max(np.abs(notch(hum, rate, asked)[middle])) < 1e-9
    wave = tone(10, rate, count)  # forward, nine notches delay it by a little
    assert notch(wave, rate, asked)[middle] == pytest.approx(wave[middle], abs=0.02)


@pytest.mark.parametrize(
    ("rate", "expected"),
    [(500, 4), (505, 5), (502, 4), (501.9, 4), (502.1, 5), (128, 1)],
)
def test_all_harmonics_are_those_whose_notch_lies_below_nyquist(rate: float, expected: int) -> None:
    """With notches of 2 Hz, 250 Hz needs a Nyquist frequency above 251 Hz."""
    assert len(notched_hz(params(line="50 Hz", harmonics="all"), rate)) == expected
    assert design(params(line="50 Hz", harmonics="all"), rate).sos.shape == (expected, 6)


@settings(max_examples=25, deadline=None)
@given(st.sampled_from(["both_ways", "forward"]), st.lists(st.floats(-1, 1), min_size=1))
def test_an_artefact_leaves_at_most_a_hundredth_outside_its_mask(
    passes: str, shape: list[float]
) -> None:
    rate, start = 250, 2000
    hum = np.sign(tone(50, rate, 300))  # the worst: full size, and at the line frequency
    artefact = np.concatenate((np.array(shape), hum))
    x = np.zeros(5000)
    x[start : start + artefact.size] = artefact
    mask = (start / rate, (start + artefact.size) / rate, "artefact")
    asked = params(line="50 Hz", width="1 Hz", passes=passes)
    out = run(asked, signal_of(x, rate, masks=[mask]))
    assert np.max(np.abs(out.x[~is_masked(out)])) <= 0.01


def test_masks_widen_by_the_response() -> None:
    asked = params(line="50 Hz")
    length = response_s(asked, Fraction(250))
    out = run(asked, signal_of(np.zeros(5000), masks=[(9, 10, "x")]))
    assert masked_s(out, "x") == [(float(9 - length), float(10 + length))]
    assert masked_s(out, "edge") == [(0.0, float(length)), (float(20 - length), 20.0)]


def test_a_notch_leaves_the_pass_band_and_says_how_long_it_rings() -> None:
    given = spec_of(250).passing(0.5, 100.0, 0.1)
    found = Found()
    out = spec(params(line="50 Hz"), given, found.findings)
    assert found.errors == []
    assert out.pass_hz == (0.5, 100.0)
    assert out.response_s == float(response_s(params(line="50 Hz"), Fraction(250)))
    # The envelope of a notch of 2 Hz falls as exp(-pi B t), B its width in one pass.
    assert 0.5 < out.response_s < 1.5


@pytest.mark.parametrize(
    ("values", "at"),
    [
        ({"line": "60 Hz"}, "line"),
        ({"line": "49.5 Hz"}, "line"),
        ({"line": "20 Hz", "harmonics": 3}, "harmonics"),
        ({"line": "60 Hz", "harmonics": "all"}, "line"),
    ],
)
def test_a_notch_at_or_above_nyquist_is_refused(values: dict[str, object], at: str) -> None:
    found = Found()
    spec(params(**values), spec_of(100), found.findings)
    assert [where for where, _ in found.errors] == [at]
    with pytest.raises(ValueError, match="below half"):
        design(params(**values), 100)


@pytest.mark.parametrize(
    ("values", "said"),
    [
        ({"line": "50 Hz", "width": "50 Hz"}, "below the line frequency"),
        ({"line": "50 Hz", "harmonics": 0}, "greater than or equal to 1"),
        ({"line": "50 Hz", "harmonics": "some"}, "harmonics"),
        ({"line": "50 Hz", "passes": "forward", "edges": "even"}, "both_ways"),
        ({}, "line"),
    ],
)
def test_unsound_parameters(values: dict[str, object], said: str) -> None:
    with pytest.raises(ValidationError, match=said):
        params(**values)
