"""Features of spectra against published values and closed forms."""

import numpy as np
import pytest

from check_values import entry
from feature_data import Collected, bins, spectra, spectra_spec
from waveassay.contract import Floats, Rows, Spectra
from waveassay_stages.feature.band_power import BandPowerParams, band_power
from waveassay_stages.feature.band_power import run as power_run
from waveassay_stages.feature.band_power import spec as power_spec
from waveassay_stages.feature.spectral_edge import SpectralEdgeParams, spectral_edges
from waveassay_stages.feature.spectral_edge import run as edge_run
from waveassay_stages.feature.spectral_entropy import SpectralEntropyParams, spectral_entropy
from waveassay_stages.feature.spectral_entropy import run as entropy_run
from waveassay_stages.feature.spectral_peak import SpectralPeakParams
from waveassay_stages.feature.spectral_peak import run as peak_run


def periodogram(x: Floats, rate_hz: float) -> Spectra:
    """Return the one-sided density of one epoch without a taper, by its definition."""
    power = np.abs(np.fft.rfft(x)) ** 2 / (rate_hz * x.size)
    power[1 : (x.size + 1) // 2] *= 2
    return spectra(power, rate_hz / x.size, duration_s=x.size / rate_hz)


def powers(data: Spectra, **given: object) -> dict[str, float]:
    features = power_run(BandPowerParams.model_validate(given), data)
    return {name: float(values[0]) for name, values in features.columns.items()}


# ---- entropy ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("key", "shares"),
    [
        ("horse_race", [1 / 2, 1 / 4, 1 / 8, 1 / 16] + [1 / 64] * 4),
        ("half_quarter_eighths", [1 / 2, 1 / 4, 1 / 8, 1 / 8]),
        ("fair_coin", [1 / 2, 1 / 2]),
    ],
)
def test_f08_shannon_entropy_of_known_distributions(key: str, shares: list[float]) -> None:
    check = entry("F08")
    bits = spectral_entropy(np.array([shares]), normalised=False)[0]
    assert bits == pytest.approx(check.expected[key], abs=check.tolerance)


def test_f09_limits_of_spectral_entropy_from_samples() -> None:
    check = entry("F09")
    t = np.arange(512) / 128
    impulse = np.zeros(512)
    impulse[0] = 1.0

    def entropy(x: Floats, *, normalised: bool, top: str) -> float:
        params = SpectralEntropyParams.model_validate(
            {"within": ("1 Hz", top), "normalised": normalised}
        )
        return float(entropy_run(params, periodogram(x, 128)).columns[""][0])

    one = np.sin(2 * np.pi * 10 * t)
    two = one + np.cos(2 * np.pi * 20 * t)
    found = {
        "one_line_bits": entropy(one, normalised=False, top="40 Hz"),
        "two_equal_lines_bits": entropy(two, normalised=False, top="40 Hz"),
        "flat_normalised": entropy(impulse, normalised=True, top="40 Hz"),
    }
    assert found == pytest.approx(check.expected, abs=check.tolerance)


# ---- spectral edge ----------------------------------------------------------------------------

_DENSITIES = {
    "flat": lambda f: np.ones_like(f),
    "one_over_f": lambda f: 1 / f,
    "one_over_f2": lambda f: 1 / f**2,
}


@pytest.mark.parametrize("shape", _DENSITIES)
@pytest.mark.parametrize("integration", ["rectangle", "trapezoid"])
@pytest.mark.parametrize("share", ["0.5", "0.9", "0.95"])
def test_g05_edges_of_closed_form_densities(shape: str, integration: str, share: str) -> None:
    check = entry("G05")
    freq = np.arange(1, 160_001) * (32 / 160_000)  # 0.2 mHz apart
    density = np.concatenate(([0.0], _DENSITIES[shape](freq)))[None]
    edge = spectral_edges(
        np.concatenate(([0.0], freq)),
        density,
        0.5,
        30.0,
        float(share),
        integration=integration,  # type: ignore[arg-type]
    )
    assert edge[0] == pytest.approx(check.expected[shape][share], abs=check.tolerance)


@pytest.mark.parametrize("share", ["0.5", "0.9", "0.95"])
def test_g05_the_bin_rule_differs_by_up_to_one_bin(share: str) -> None:
    # Of a flat density: whole bins take half a bin too much at either limit, which a steep one
    # feels at the lower limit by more than a bin.
    freq = bins(641, 0.05)
    edge = spectral_edges(freq, np.ones((1, 641)), 0.5, 30.0, float(share), interpolation="bin")
    assert 0 <= edge[0] - entry("G05").expected["flat"][share] + 0.025 <= 0.05 + 1e-9


def test_g04_95_and_50_percent_of_the_power_lie_below_the_edge_and_the_median() -> None:
    definition = entry("G04").expected
    rng = np.random.default_rng(4)
    data = spectra(rng.gamma(1.0, size=257) / (1 + np.arange(257)))
    for key, share in (("SEF95", "95 %"), ("MF", "50 %")):
        assert share in definition[key]
        params = SpectralEdgeParams.model_validate(
            {"fraction": share, "within": ("0.5 Hz", "30 Hz")}
        )
        edge = float(edge_run(params, data).columns[""][0])
        below = band_power(data.freq_hz, data.density, 0.5, edge, edges="partial")
        whole = band_power(data.freq_hz, data.density, 0.5, 30.0, edges="partial")
        assert below[0] / whole[0] == pytest.approx(params.fraction, rel=1e-9)


# ---- band power -------------------------------------------------------------------------------


def _bands(entry_id: str, names: tuple[str, ...]) -> dict[str, tuple[str, str]]:
    limits = entry(entry_id).expected
    return {name.lower(): (f"{limits[name][0]} Hz", f"{limits[name][1]} Hz") for name in names}


def _bands_with_a_line_at(
    line_hz: float, bands: dict[str, tuple[str, str]], edges: str
) -> list[str]:
    density = np.zeros(1001)
    density[round(line_hz / 0.1)] = 1.0
    found = powers(spectra(density, 0.1), bands=bands, edges=edges)
    return [name for name, power in found.items() if power > 0]


def test_g01_bands_of_the_clinical_glossary() -> None:
    bands = _bands("G01", ("delta", "theta", "alpha", "beta", "gamma"))
    # Delta and theta leave out the upper limit; 13 to 14 Hz belongs to none.
    assert _bands_with_a_line_at(0.1, bands, "lower_in") == ["delta"]
    assert _bands_with_a_line_at(4.0, bands, "lower_in") == ["theta"]
    assert _bands_with_a_line_at(8.0, bands, "lower_in") == ["alpha"]
    assert _bands_with_a_line_at(13.5, bands, "lower_in") == []
    assert _bands_with_a_line_at(30.0, bands, "lower_in") == ["gamma"]
    # Alpha includes both of its limits.
    alpha = {"alpha": bands["alpha"]}
    assert _bands_with_a_line_at(13.0, alpha, "both_in") == ["alpha"]
    flat = powers(spectra(np.ones(1001), 0.1), bands=bands)
    for name, (low, high) in entry("G01").expected.items():
        assert flat[name] == pytest.approx(high - low, rel=1e-9)


def test_g11_bands_of_the_anaesthesia_literature() -> None:
    bands = _bands("G11", ("slow", "delta", "theta", "alpha", "beta", "gamma"))
    assert _bands_with_a_line_at(1.0, bands, "lower_in") == ["delta"]  # slow is below 1 Hz
    for gap_hz in (4.5, 8.5, 12.5, 25.5):
        assert _bands_with_a_line_at(gap_hz, bands, "lower_in") == []
    found = Collected()
    power_spec(BandPowerParams.model_validate({"bands": bands}), spectra_spec(), found.findings)
    assert found.refused_at == ["bands.gamma"]  # 80 Hz is above Nyquist at 128 samples a second
    assert "bands.slow" in found.warned_at  # 0.1 Hz is below one cycle in 4 s


def test_i01_bands_of_heart_rate_variability_leave_nothing_out() -> None:
    bands = _bands("I01", ("VLF", "LF", "HF"))
    rng = np.random.default_rng(1)
    data = spectra(rng.gamma(1.0, size=501), 0.001)  # of intervals resampled to 1 a second
    parts = powers(data, bands=bands)
    whole = powers(data, bands={"total": ("0 Hz", "0.4 Hz")})["total"]
    assert sum(parts.values()) == pytest.approx(whole, rel=1e-12)


@pytest.mark.parametrize("edges", ["lower_in", "both_in", "partial"])
def test_c06_a_sine_of_10_uv_has_50_uv2_and_a_density_of_100(edges: str) -> None:
    check = entry("C06")
    t = np.arange(500) / 250
    data = periodogram(10 * np.sin(2 * np.pi * 10 * t), 250)
    power = powers(data, bands={"alpha": ("8 Hz", "13 Hz")}, edges=edges)["alpha"]
    assert power == pytest.approx(check.expected["integrated_power"], abs=check.tolerance)
    params = SpectralPeakParams.model_validate({"within": ("8 Hz", "13 Hz")})
    peak = {name: float(v[0]) for name, v in peak_run(params, data).columns.items()}
    assert peak["frequency"] == pytest.approx(10.0, abs=1e-9)
    assert peak["power"] == pytest.approx(check.expected["psd_peak"], rel=1e-9)


@pytest.mark.parametrize("size", [500, 501])
def test_c05_power_over_all_bins_is_the_mean_square(size: int) -> None:
    check = entry("C05")
    x = np.random.default_rng(9).normal(3, 20, size)
    data = periodogram(x, 250)
    for edges in ("lower_in", "both_in", "partial"):
        params = {"bands": {"all": ("0 Hz", f"{float(data.freq_hz[-1])!r} Hz")}, "edges": edges}
        power = powers(data, **params)["all"]
        assert power / np.mean(x**2) == pytest.approx(check.expected, abs=check.tolerance)


def test_c08_power_of_white_noise_is_its_density_times_the_width() -> None:
    check = entry("C08")
    rng = np.random.default_rng(3)
    level = []
    for _ in range(400):
        data = periodogram(rng.normal(0, 3, 5000), 250)
        level.append(powers(data, bands={"beta": ("20 Hz", "100 Hz")})["beta"] / 80)
    assert np.mean(level) == pytest.approx(check.expected, abs=check.tolerance)


@pytest.mark.parametrize("ratio", ["0.25", "0.5"])
def test_c09_averaging_over_a_resonance_lowers_its_peak(ratio: str) -> None:
    check = entry("C09")
    half_power_width_hz, centre_hz = 1.0, 10.0
    freq = bins(40_001, 0.0005)
    density = 1 / (1 + (2 * (freq - centre_hz) / half_power_width_hz) ** 2)
    width = float(ratio) * half_power_width_hz
    for rule in ("rectangle", "trapezoid"):
        power = band_power(
            freq,
            density[None],
            centre_hz - width / 2,
            centre_hz + width / 2,
            integration=rule,
            edges="partial",
        )
        assert power[0] / width - 1 == pytest.approx(check.expected[ratio], abs=check.tolerance)


def test_c13_decibels_of_power() -> None:
    check = entry("C13")
    bands = {"alpha": ("8 Hz", "13 Hz")}

    def level(power_ratio: float) -> float:
        # A flat density of the ratio over 5 Hz, against one of 1.
        both = [
            powers(spectra(np.full(257, r)), bands=bands, express="decibel")["alpha"]
            for r in (power_ratio, 1.0)
        ]
        return both[0] - both[1]

    found = {
        "ratio_2": level(2),
        "ratio_half": level(0.5),
        "ratio_100": level(100),
        "amplitude_ratio_10": level(10**2),
    }
    assert found == pytest.approx(check.expected, abs=check.tolerance)
    # The reference is one unit squared: 5 Hz of 0.2 uV^2/Hz are 1 uV^2, which is 0 dB.
    unit = powers(spectra(np.full(257, 0.2)), bands=bands, express="decibel")["alpha"]
    assert unit == pytest.approx(0.0, abs=1e-9)


# ---- averages ---------------------------------------------------------------------------------


def test_features_of_an_average_are_not_averages_of_features() -> None:
    """A median frequency is no linear quantity; band power is. Common practice, no source."""
    density = np.zeros((2, 257))
    density[0, 8], density[1, 80] = 3.0, 1.0  # 2 Hz and 20 Hz
    single = spectra(density)
    rows = Rows(np.array([0.0]), np.array([8.0]), ("all",), np.array([True]), ("",), np.array([2]))
    mean = np.mean(density, axis=0, keepdims=True)
    average = Spectra("frontal", "uV", rows, single.freq_hz, mean, 0.5, np.array([4.0]))
    params = SpectralEdgeParams.model_validate({"fraction": "50 %", "within": ("0.5 Hz", "30 Hz")})
    assert edge_run(params, single).columns[""].tolist() == pytest.approx([2.0, 20.0])
    edge = float(edge_run(params, average).columns[""][0])
    assert edge == pytest.approx(2.0 + 0.25 * (2 / 3 - 0.5), abs=1e-9)
    bands = {"low": ("0.5 Hz", "4 Hz")}
    each = [powers(spectra(row), bands=bands)["low"] for row in density]
    assert powers(average, bands=bands)["low"] == pytest.approx(np.mean(each), rel=1e-12)
