"""Widths and calibration of EDF against the published format (check value G13).

Source: Kemp B, Varri A, Rosa AC, Nielsen KD, Gade J 1992, A simple format for exchange of digitized
polygraphic recordings, Electroencephalogr Clin Neurophysiol 82:391-393; EDF+: Kemp and Olivan 2003,
Clin Neurophysiol 114:1755-1761. Field widths from the specification text; arithmetic derived.
"""

from fractions import Fraction
from pathlib import Path

import pytest

from edf_bytes import Sig, build
from waveassay.recording import RecordingError, open_recording
from waveassay.recording.header import MAIN_FIELDS, SIGNAL_FIELDS

TOLERANCE = 1e-9


def test_field_widths_add_up_to_256_bytes() -> None:
    assert sum(width for _, width in MAIN_FIELDS) == 256
    assert sum(width for _, width in SIGNAL_FIELDS) == 256


def test_three_signals_have_1024_header_bytes(tmp_path: Path) -> None:
    path = tmp_path / "three.edf"
    signals = [Sig("A"), Sig("B"), Sig("C")]
    path.write_bytes(build(signals, header_bytes=1024))
    with open_recording(path) as recording:
        assert len(recording.facts.signals) == 3
    for wrong in (1023, 1025, 768):
        path.write_bytes(build(signals, header_bytes=wrong))
        with pytest.raises(RecordingError, match="1024"):
            open_recording(path)


def test_calibration_of_a_12_bit_converter_over_plus_minus_500_uv(tmp_path: Path) -> None:
    """Digital 0 is not physical 0 where the converter's range is asymmetric."""
    path = tmp_path / "converter.edf"
    data = [0, 1, 2047, -2048]
    path.write_bytes(build([Sig(spr=4, dmin=-2048, dmax=2047, pmin=-500, pmax=500, data=data)], 1))
    with open_recording(path) as recording:
        ((zero, one, top, bottom),) = recording.read([0], 0, Fraction(0), Fraction(1))
        assert recording.facts.signals[0].unit == "uV"
    assert one - zero == pytest.approx(0.2442002442, abs=TOLERANCE)
    assert zero == pytest.approx(0.1221001221, abs=TOLERANCE)
    assert top == pytest.approx(500.0, abs=TOLERANCE)
    assert bottom == pytest.approx(-500.0, abs=TOLERANCE)


def test_samples_are_little_endian(tmp_path: Path) -> None:
    path = tmp_path / "order.edf"
    whole = Sig(spr=1, pmin=-32768, pmax=32767)
    path.write_bytes(build([whole], 0, stated_records=1, tail=b"\x01\x02"))
    with open_recording(path) as recording:
        assert recording.read([0], 0, Fraction(0), Fraction(1))[0] == pytest.approx(0x0201)
