"""What features share is that of the densities at hand, and of no others."""

import numpy as np
import pytest

from feature_data import bins, spectra
from waveassay.contract import Floats
from waveassay_stages.feature._shared import in_double, shared
from waveassay_stages.feature.band_power import BandPowerParams, band_power
from waveassay_stages.feature.band_power import run as power_run
from waveassay_stages.feature.spectral_edge import spectral_edges

FREQ = bins(257, 0.25)
PARAMS = BandPowerParams.model_validate({"bands": {"alpha": ("8 Hz", "13 Hz")}})


def test_spectra_one_after_another_have_their_own_powers() -> None:
    """Also where the next ones lie in the memory of those before."""
    for k in range(1, 30):
        density = np.full((3, 257), float(k))
        power = power_run(PARAMS, spectra(density)).columns["alpha"]
        assert power.tolist() == [5.0 * k] * 3


def test_bands_and_ranges_are_not_mixed_up() -> None:
    data = spectra(np.random.default_rng(1).gamma(2.0, size=(4, 257)))
    writable = data.density.copy()
    for low, high in ((8.0, 13.0), (8.0, 12.0), (8.0, 13.0)):
        for edges in ("lower_in", "both_in", "partial"):
            np.testing.assert_array_equal(
                band_power(FREQ, data.density, low, high, edges=edges),
                band_power(FREQ, writable, low, high, edges=edges),
            )
        for fraction in (0.5, 0.95):
            for rule in ("linear", "bin"):
                np.testing.assert_array_equal(
                    spectral_edges(FREQ, data.density, low, high, fraction, interpolation=rule),
                    spectral_edges(FREQ, writable, low, high, fraction, interpolation=rule),
                )
    assert np.any(
        band_power(FREQ, data.density, 8, 13) != band_power(2 * FREQ, data.density, 8, 13)
    )


def test_densities_that_can_be_written_are_worked_out_each_time() -> None:
    density = np.ones((2, 257))
    through_a_view = density[:]
    through_a_view.flags.writeable = False
    for given in (density, through_a_view):
        density[:] = 1.0
        assert band_power(FREQ, given, 8, 13).tolist() == [5.0, 5.0]
        density[1] = 3.0
        assert band_power(FREQ, given, 8, 13).tolist() == [5.0, 15.0]


def test_what_is_shared_is_made_once_and_cannot_be_written() -> None:
    density = np.ones((2, 257))
    density.flags.writeable = False
    made = []

    def total() -> Floats:
        made.append(1)
        return np.asarray(np.sum(density, axis=-1), np.float64)

    first, again = shared(density, "total", total), shared(density, "total", total)
    assert first is again
    assert made == [1]
    with pytest.raises(ValueError, match="read-only"):
        first[0] = 0.0


def test_double_precision_is_taken_as_it_is() -> None:
    density = np.ones((2, 257))
    assert in_double(density) is density
