import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from feature_data import Collected, some_rows, spectra, spectra_spec
from waveassay_stages.feature.spectral_entropy import (
    SpectralEntropyParams,
    run,
    spec,
    spectral_entropy,
)


def params(**given: object) -> SpectralEntropyParams:
    return SpectralEntropyParams.model_validate({"within": ("0.5 Hz", "30 Hz"), **given})


@given(seed=st.integers(0, 2**31), bins=st.integers(2, 300), scale=st.floats(1e-9, 1e9))
def test_entropy_lies_between_0_and_that_of_a_flat_spectrum_at_any_scale(
    seed: int, bins: int, scale: float
) -> None:
    density = np.random.default_rng(seed).gamma(0.3, size=(1, bins))
    bits = spectral_entropy(density, normalised=False)[0]
    assert 0 <= bits <= np.log2(bins) + 1e-9
    assert spectral_entropy(density * scale, normalised=False)[0] == pytest.approx(bits, rel=1e-9)
    share = spectral_entropy(density, normalised=True)[0]
    assert share == pytest.approx(bits / np.log2(bins), rel=1e-12)


@given(seed=st.integers(0, 2**31))
def test_the_order_of_frequencies_does_not_count(seed: int) -> None:
    rng = np.random.default_rng(seed)
    density = rng.gamma(0.5, size=(1, 50))
    shuffled = rng.permutation(density, axis=1)
    assert spectral_entropy(shuffled, normalised=False) == pytest.approx(
        spectral_entropy(density, normalised=False), rel=1e-12
    )


def test_merging_two_bins_lowers_entropy_by_that_of_the_split() -> None:
    # Shannon's grouping rule: H(1/2, 1/3, 1/6) = H(1/2, 1/2) + 1/2 H(2/3, 1/3).
    def entropy(*p: float) -> float:
        return float(spectral_entropy(np.array([p]), normalised=False)[0])

    assert entropy(1 / 2, 1 / 3, 1 / 6) == pytest.approx(1 + entropy(2 / 3, 1 / 3) / 2, rel=1e-12)


def test_only_the_range_counts_and_edges_say_which_bins_are_in() -> None:
    density = np.zeros(257)
    density[[2, 120]] = 1.0  # 0.5 Hz and 30 Hz
    density[[0, 1, 200]] = 50.0  # outside
    both = run(params(normalised=False, edges="both_in"), spectra(density)).columns[""]
    lower = run(params(normalised=False, edges="lower_in"), spectra(density)).columns[""]
    assert (both[0], lower[0]) == (1.0, 0.0)


def test_rows_without_power_are_missing_with_the_reason() -> None:
    density = np.ones((3, 257))
    density[1] = 0.0
    features = run(params(), spectra(density, kept=[True, True, False]))
    assert np.isnan(features.columns[""]).tolist() == [False, True, True]
    assert features.missing == ("", "no power in within", "")


def test_a_row_does_not_depend_on_its_neighbours() -> None:
    data = spectra(np.random.default_rng(6).gamma(2.0, size=(9, 257)))
    whole = run(params(), data).columns[""]
    assert whole.tolist() == [
        run(params(), some_rows(data, slice(i, i + 1))).columns[""][0] for i in range(9)
    ]


def test_unit_and_refusal() -> None:
    found = Collected()
    assert spec(params(), spectra_spec(), found.findings).columns[0].unit == "1"
    assert spec(params(normalised=False), spectra_spec(), found.findings).columns[0].unit == "bit"
    assert not found.refused
    spec(params(within=("8.05 Hz", "8.4 Hz")), spectra_spec(), found.findings)
    assert found.refused_at == ["within"]
