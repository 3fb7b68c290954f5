"""What every feature asks of a band."""

from dataclasses import replace
from fractions import Fraction

import pytest

from waveassay.contract import Findings, SignalSpec, SpectraSpec, check_band

SIGNAL = SignalSpec("s", "uV", rate_hz=Fraction(128), pass_hz=(0.5, 40.0))
SPECTRA = SpectraSpec(SIGNAL, window_s=4.0, resolution_hz=1.5, bin_hz=0.25, top_hz=64.0)


def found(low_hz: float, high_hz: float, given: SpectraSpec = SPECTRA) -> list[tuple[str, str]]:
    said: list[tuple[str, str]] = []

    def refuse(message: str, at: str) -> None:
        assert at == "bands.x"
        said.append(("refused", message))

    def warn(message: str, at: str) -> None:
        assert at == "bands.x"
        said.append(("warned", message))

    check_band(low_hz, high_hz, given, Findings(refuse, warn), "bands.x")
    return said


@pytest.mark.parametrize("band", [(0.5, 40.0), (8.0, 13.0), (8.0, 9.5)])
def test_a_band_that_touches_the_pass_band_is_inside_it(band: tuple[float, float]) -> None:
    assert found(*band) == []


@pytest.mark.parametrize(
    ("band", "kind", "word"),
    [
        ((13.0, 8.0), "refused", "empty"),
        ((8.0, 8.0), "refused", "empty"),
        ((-1.0, 8.0), "refused", "empty"),
        ((0.49, 8.0), "refused", "pass only from 0.5 Hz"),
        ((8.0, 40.1), "refused", "pass only up to 40 Hz"),
        ((8.0, 9.0), "warned", "narrower"),
    ],
)
def test_what_is_wrong_with_a_band(band: tuple[float, float], kind: str, word: str) -> None:
    (said,) = found(*band)
    assert said[0] == kind
    assert word in said[1]


def test_above_nyquist() -> None:
    said = found(8.0, 65.0, replace(SPECTRA, signal=SignalSpec("s", "uV")))
    assert [kind for kind, _ in said] == ["refused"]
    assert "64 Hz" in said[0][1]


def test_below_one_cycle_in_a_window() -> None:
    unfiltered = replace(SPECTRA, signal=SignalSpec("s", "uV"))
    assert found(0.25, 4.0, unfiltered) == []
    (said,) = found(0.2, 4.0, unfiltered)
    assert said[0] == "warned"
    assert "below one cycle" in said[1]
    assert found(0.0, 4.0, unfiltered) == []


def test_what_is_not_known_yet_is_not_held_against_a_band() -> None:
    unknown = replace(SPECTRA, signal=SignalSpec("s", "uV"), resolution_hz=None, top_hz=None)
    assert found(8.0, 500.0, unknown) == []


def test_filters_in_series_leave_what_all_of_them_pass() -> None:
    spec = SignalSpec("s", "uV").passing(0.5, None, 3.0).passing(0.1, 40.0, 9.0)
    assert spec.pass_hz == (0.5, 40.0)
    assert spec.response_s == 9.0
    assert spec.passing(None, 51.2, 1.0).pass_hz == (0.5, 40.0)
