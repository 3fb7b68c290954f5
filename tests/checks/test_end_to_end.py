"""Published values of spectra and features, through the command and from 16-bit recordings.

The tolerance of a check is the entry's own and what rounding to 16 bits may do to the quantity: an
error of variance q^2/12 (W. R. Bennett, Bell Syst. Tech. J. 27, 446-472, 1948; B. Widrow, IRE
Trans. Circuit Theory 3, 266-276, 1956), carried on to a power in `rounding_of_power`.
"""

from collections.abc import Callable
from math import log2, log10, sqrt

import numpy as np
import pytest

from check_values import entry
from made_files import autoregressive, eeg
from made_recordings import (
    ALIASES,
    APART_HZ,
    COARSE_Q_UV,
    EPOCH,
    INTEGRALS,
    LEVELS_UV2,
    Q_UV,
    QUANTILES_HZ,
    QUANTILES_Q_UV,
    QUANTILES_RATE_HZ,
    QUANTILES_UV,
    RANDOM_ERROR_HZ,
    RATE_HZ,
    SHORT_S,
    TONE_UV,
    alias_name,
    rounding_of_power,
)
from published_run import PublishedRun

BIN_HZ = RATE_HZ / EPOCH
TONE_RMS = TONE_UV / sqrt(2)
#: A tone of 10 Hz at 250 Hz repeats itself after 25 samples.
TONE_ROUNDINGS = 25
TONE_ROUNDING = rounding_of_power(TONE_RMS, Q_UV, TONE_ROUNDINGS)
HANN_BANDWIDTH_BINS = 1.5


def test_sine_through_a_rectangle(published: PublishedRun) -> None:
    """C06: Bendat & Piersol, chapter 5; Heinzel et al. 2002."""
    check = entry("C06")
    power = published.value("rectangle", "tone", "power.all")
    peak = published.value("rectangle", "tone", "spectral_peak.power")
    where = published.value("rectangle", "tone", "spectral_peak.frequency")
    off = check.tolerance + TONE_ROUNDING
    assert where == check.input["f_Hz"]
    assert power == pytest.approx(check.expected["integrated_power"], abs=off)
    assert peak * BIN_HZ == pytest.approx(check.expected["spectrum_peak"], abs=off)
    assert peak == pytest.approx(check.expected["psd_peak"], abs=off / BIN_HZ)
    # d sqrt(P) = dP / (2 sqrt(P)).
    assert sqrt(power) == pytest.approx(check.expected["rms"], abs=off / (2 * TONE_RMS))


def test_sine_through_a_hann_window(published: PublishedRun) -> None:
    """A15: Heinzel et al. 2002; Harris 1978."""
    check = entry("A15")
    expected = check.expected
    average = published.spectrum("hann", "tone")
    k = round(check.input["f_Hz"] / BIN_HZ)
    assert average["frequency_hz"][k] == check.input["f_Hz"]
    peak = published.value("hann", "tone", "spectral_peak.power")
    power = published.value("hann", "tone", "power.all")
    off = check.tolerance + TONE_ROUNDING
    assert power == pytest.approx(expected["psd_sum_times_df"], abs=off)
    width_hz = HANN_BANDWIDTH_BINS * BIN_HZ
    assert peak == pytest.approx(expected["psd_peak"], abs=off / width_hz)
    assert average["density"][k] == pytest.approx(expected["psd_peak"], abs=off / width_hz)
    # d sqrt(2 P) = dP / sqrt(2 P); a side bin has a quarter of the power.
    amplitude = np.sqrt(2 * average["density"][[k - 1, k, k + 1]] * width_hz)
    side, top = expected["amplitude_at_adjacent_bin"], expected["amplitude_at_bin"]
    assert amplitude[1] == pytest.approx(top, abs=off / top)
    assert amplitude[[0, 2]] == pytest.approx([side, side], abs=off / side)


def test_loss_half_way_between_bins(published: PublishedRun) -> None:
    """A16: Harris 1978, table I.

    The mirror image of the tone adds to it or takes away, by its phase. That turns by 270 degrees
    from one epoch to the next, so that over pairs of them only the image's own power is left: at
    62.75 of 250 Hz the square of pi / 2 / 500, 0.00004 dB, within the entry's tolerance.
    """
    check = entry("A16")
    full = TONE_UV**2 / 2 / BIN_HZ
    off = check.tolerance + 10 / np.log(10) * rounding_of_power(TONE_RMS, Q_UV, 1000) / TONE_RMS**2
    for column in ("band_power.below", "band_power.above"):
        density = published.epochs("halfway", "halfway", column) / BIN_HZ
        pairs = density[: density.size // 2 * 2]
        assert 10 * log10(np.mean(pairs) / full) == pytest.approx(check.expected, abs=off)


def test_parseval(published: PublishedRun) -> None:
    """C05: density times bin is the mean square of the values that the file holds."""
    check = entry("C05")
    (signal,) = (made for made in eeg() if made.name == "offset_noise")
    squares = np.mean(signal.held.reshape(-1, EPOCH) ** 2, axis=-1)
    power = published.epochs("rectangle", signal.name, "power.all")
    # 1e-12 for sums of 500 numbers in double precision, as the entry has it: no rounding is left.
    assert power / squares == pytest.approx(np.ones(power.size), abs=check.tolerance)


def test_white_noise(published: PublishedRun) -> None:
    """C08: Bendat & Piersol, chapter 5. Rounding adds 2 q^2 / (12 fs)."""
    check = entry("C08")
    found = np.mean(published.spectrum("white", "white_3")["density"][2:-2])
    off = check.tolerance + Q_UV**2 / 6 / RATE_HZ
    assert found == pytest.approx(check.expected, abs=off)


def test_multitaper_noise(published: PublishedRun) -> None:
    """B08: Thomson 1982; Percival & Walden 1993, section 7.1."""
    check = entry("B08")
    density = published.spectrum("tapered_noise", "white_1")["density"]
    inner = density[6:-6]  # a half bandwidth of 3 bins, and that of its image
    level, variation = (check.expected[k] for k in ("mean_level", "coefficient_of_variation"))
    assert np.mean(inner) == pytest.approx(level, abs=check.tolerance["mean_level"])
    ratios = [
        published.value("tapered_noise", "white_1", f"power.at_{f}", "sd")
        / published.value("tapered_noise", "white_1", f"power.at_{f}")
        for f in APART_HZ
    ]
    off = check.tolerance["coefficient_of_variation"]
    assert np.mean(ratios) == pytest.approx(variation, abs=off)


def test_random_error_of_a_hundred_periodograms(published: PublishedRun) -> None:
    """C10: Bartlett 1950; Bendat & Piersol, chapter 8."""
    check = entry("C10")
    power = [published.epochs("hundred", "white_1", f"power.at_{f}") for f in RANDOM_ERROR_HZ]
    assert np.std(power) / np.mean(power) == pytest.approx(check.expected, abs=check.tolerance)


@pytest.mark.parametrize(("condition", "epochs"), [("two", 2), ("eight", 8), ("thirty", 30)])
def test_degrees_of_freedom(published: PublishedRun, condition: str, epochs: int) -> None:
    """C01: Percival & Walden 1993, section 6.17, in conditions of so many half-shared epochs."""
    check = entry("C01")
    found = published.spectrum("dof", "tone", condition)["dof"]
    expected = check.expected[f"edof_NB{epochs}"]
    assert found == pytest.approx(np.full(found.size, expected), abs=check.tolerance)


@pytest.mark.parametrize(("length_s", "time_bandwidth", "tapers"), [(2, 3, 5), (4, 2, 3)])
def test_energy_within_the_half_bandwidth(
    published: PublishedRun, length_s: int, time_bandwidth: int, tapers: int
) -> None:
    """B03: Thomson 1982; Percival & Walden 1993. The tapers are as many as by default."""
    check = entry("B03")
    chain = f"tapers_{length_s}"
    name = f"T{length_s}_NW{time_bandwidth}_K{tapers}"
    share = published.value(chain, "tone", "band_power.inside") / published.value(
        chain, "tone", "whole.all"
    )
    off = check.tolerance[f"energy_within_W_{name}"] + TONE_ROUNDING / TONE_RMS**2
    assert share == pytest.approx(check.expected[f"energy_within_W_{name}"], abs=off)
    dof = published.spectrum(chain, "tone")["dof"] / (SHORT_S // length_s)
    assert dof == pytest.approx(np.full(dof.size, 2 * check.expected[f"K_NW{time_bandwidth}"]))


def test_width_of_a_line(published: PublishedRun) -> None:
    """B03: a line is 2.69 Hz wide at half its power (the entry's own measurement)."""
    check = entry("B03")
    average = published.spectrum("tapers_2", "tone")
    freq_hz, density = average["frequency_hz"], average["density"]
    above = np.flatnonzero(density >= np.max(density) / 2)
    (first, last), half = above[[0, -1]], np.max(density) / 2
    lower = np.interp(half, density[[first - 1, first]], freq_hz[[first - 1, first]])
    upper = np.interp(half, density[[last + 1, last]], freq_hz[[last + 1, last]])
    key = "half_power_width_Hz_T2_NW3_K5"
    assert upper - lower == pytest.approx(check.expected[key], abs=check.tolerance[key])


def test_autoregressive_process(published: PublishedRun) -> None:
    """C12: the integral of the spectrum is the closed form of the variance (Box & Jenkins 1970).

    The recording has the process's density at every bin of 1/500 of the rate. Their sum differs
    from the integral by the 500th power of the poles' radius 0.707, which is nothing.
    """
    check = entry("C12")
    off = check.tolerance + rounding_of_power(sqrt(check.expected), autoregressive().q, EPOCH)
    found = published.value("rectangle", "ar2", "power.all")
    assert found == pytest.approx(check.expected, abs=off)


def test_decibels(published: PublishedRun) -> None:
    """C13: IEC 60027-3 / ISO 80000-3, as differences between tones of one recording."""
    check = entry("C13")

    def above(freq_hz: int, other_hz: int) -> tuple[float, float]:
        """Return how many decibels one tone lies above another, and how far off by rounding."""
        found = (
            published.value("rectangle", "levels", f"level.at_{f}") for f in (freq_hz, other_hz)
        )
        off = check.tolerance
        for power in (LEVELS_UV2[freq_hz], LEVELS_UV2[other_hz]):
            off += 10 / np.log(10) * rounding_of_power(sqrt(power), Q_UV, TONE_ROUNDINGS) / power
        first, second = found
        return first - second, off

    for key, tones in {
        "ratio_2": (20, 10),
        "ratio_half": (30, 10),
        "ratio_100": (40, 10),
        "amplitude_ratio_10": (40, 10),
    }.items():
        found, off = above(*tones)
        assert found == pytest.approx(check.expected[key], abs=off)


@pytest.mark.parametrize("key", ALIASES)
def test_aliases(published: PublishedRun, key: str) -> None:
    """E01: Shannon 1949; Nyquist 1928. What is above half the rate is folded below it."""
    check = entry("E01")
    chain = f"aliases_{key.split('@')[1]}"
    found = published.epochs(chain, alias_name(key), "spectral_peak.frequency")
    assert found == pytest.approx(np.full(found.size, check.expected[key]), abs=check.tolerance)


def test_noise_of_rounding(published: PublishedRun) -> None:
    """E03: Bennett 1948; Widrow 1956: the floor under two tones is 2 q^2 / (12 fs)."""
    check = entry("E03")
    average = published.spectrum("coarse", "coarse")
    floor = np.mean(average["density"][average["frequency_hz"] > 40][:-1])
    assert COARSE_Q_UV == 0.5
    assert floor * RATE_HZ / 2 == pytest.approx(check.expected, abs=check.tolerance)


DENSITIES: dict[str, Callable[[float], float]] = {
    "flat": lambda f: 1.0,
    "one_over_f": lambda f: 1 / f,
    "one_over_f2": lambda f: f**-2,
}
SLOPES: dict[str, Callable[[float], float]] = {
    "flat": lambda f: 0.0,
    "one_over_f": lambda f: f**-2,
    "one_over_f2": lambda f: 2 * f**-3,
}


@pytest.mark.parametrize("share", [50, 90, 95])
@pytest.mark.parametrize("name", ["flat", "one_over_f", "one_over_f2"])
def test_quantile_frequencies(published: PublishedRun, name: str, share: int) -> None:
    """G05: the definition of Rampil 1998 on densities in closed form.

    Each bin has the integral of the density over its width h. Between a bin's borders the stage
    takes the density for even, which moves a cumulative power by h^2/8 times the density's slope,
    at either limit and at the edge; that over the density at the edge moves the frequency.
    """
    check = entry("G05")
    expected = check.expected[name][str(share / 100)]
    low, high = QUANTILES_HZ
    half_bin = 0.5 / SHORT_S
    slopes = sum(SLOPES[name](f - half_bin) for f in (low, expected, high))
    moved = (2 * half_bin) ** 2 / 8 * slopes
    power_off = rounding_of_power(QUANTILES_UV, QUANTILES_Q_UV, QUANTILES_RATE_HZ * SHORT_S)
    rounded = power_off / QUANTILES_UV**2 * INTEGRALS[name](low, high)
    off = check.tolerance + (moved + rounded) / DENSITIES[name](expected)
    found = published.value("quantiles", name, f"below_{share}")
    assert found == pytest.approx(expected, abs=off)


def test_entropy_limits(published: PublishedRun) -> None:
    """F09: Shannon 1948; Inouye et al. 1991.

    A share e of the power in other bins raises the entropy of lines by at most h(e) + e log2(n),
    with h the entropy of e and 1 - e. Rounding errors are at most q/2, so e is at most q^2/4 over
    the power; they may also set two lines apart, by less than their own power.
    """
    check = entry("F09")

    def raised(power: float) -> float:
        e = Q_UV**2 / 4 / power
        return -e * log2(e) - (1 - e) * log2(1 - e) + e * log2(EPOCH / 2)

    one = published.epochs("entropy", "tone", "bits")
    off = check.tolerance + raised(TONE_RMS**2)
    assert one == pytest.approx(np.full(one.size, check.expected["one_line_bits"]), abs=off)
    two = published.epochs("entropy", "two_lines", "bits")
    assert two == pytest.approx(np.full(two.size, check.expected["two_equal_lines_bits"]), abs=off)
    flat = published.epochs("entropy", "impulses", "normalised")
    # Impulses of a whole number of steps are held exactly.
    expected = np.full(flat.size, check.expected["flat_normalised"])
    assert flat == pytest.approx(expected, abs=check.tolerance)
