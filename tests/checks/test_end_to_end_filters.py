"""Published gains of filters, through the command: tones before and after, at 16 bits.

A tone's power is the sum of its averaged density times the bin. Rounding is in both sums alike, but
what the filter lets pass of its q^2/12 (Bennett 1948; Widrow 1956): that over the power left is
allowed, beside the entry's own tolerance.
"""

from math import log, log10, pi, sqrt, tan

import numpy as np
import pytest

from check_values import entry
from made_recordings import (
    BESIDE_EDGE_HZ,
    FILTERED_UV,
    ORDERS,
    Q_UV,
    RATE_HZ,
    filter_tones,
)
from published_run import PublishedRun


def power(run: PublishedRun, chain: str, signal: str) -> float:
    """Return the mean square of a signal, uV^2."""
    average = run.spectrum(chain, signal)
    return float(np.sum(average["density"]) * average["frequency_hz"][1])


def loss_db(run: PublishedRun, chain: str, signal: str) -> float:
    """Return how many decibels a filter takes from a tone."""
    return 10 * log10(power(run, "unfiltered", signal) / power(run, chain, signal))


def rounding_db(expected_db: float) -> float:
    """Return how far a loss may be off for the rounding errors that are left beside the tone."""
    return 10 / log(10) * Q_UV**2 / 12 / (FILTERED_UV**2 / 2 / 10 ** (expected_db / 10))


@pytest.mark.parametrize("order", ORDERS)
def test_loss_at_the_cut_off(published: PublishedRun, order: int) -> None:
    """D02: Butterworth 1930: half the power, whatever the order."""
    check = entry("D02")
    expected = check.expected[order - 1]
    off = check.tolerance + rounding_db(expected)
    assert loss_db(published, f"forward_{order}", "cutoff") == pytest.approx(expected, abs=off)


@pytest.mark.parametrize("order", [1, 2, 4, 8])
def test_loss_an_octave_above(published: PublishedRun, order: int) -> None:
    """D03: Butterworth 1930; Zverev 1967, at the frequency of twice the tangent."""
    check = entry("D03")
    expected = check.expected[f"n{order}_at_2fc"]
    off = check.tolerance + rounding_db(expected)
    assert loss_db(published, f"forward_{order}", "octave") == pytest.approx(expected, abs=off)


@pytest.mark.parametrize("order", [1, 2, 4])
def test_passes_both_ways(published: PublishedRun, order: int) -> None:
    """D04: Winter 2009: twice the loss at the cut-off, half the power at a share of it."""
    check, half = entry("D04"), entry("D02").expected[order - 1]
    twice = check.expected["loss_at_fc_dB"]
    off = check.tolerance + rounding_db(twice)
    chain = f"twice_{order}"
    assert loss_db(published, chain, "cutoff") == pytest.approx(twice, abs=off)
    assert loss_db(published, chain, f"half_{order}") == pytest.approx(half, abs=off)


@pytest.mark.parametrize("order", [1, 2, 4])
def test_cut_off_means_the_same_both_ways(published: PublishedRun, order: int) -> None:
    """D02 where the recipe asks for -3 dB after both passes."""
    check = entry("D02")
    expected = check.expected[order - 1]
    off = check.tolerance + rounding_db(expected)
    assert loss_db(published, f"corrected_{order}", "cutoff") == pytest.approx(expected, abs=off)


@pytest.mark.parametrize("line", [50, 60])
def test_notch(published: PublishedRun, line: int) -> None:
    """D13: Orfanidis 1996, section 11.3: its depth, its width, and what it leaves at 0 Hz.

    An edge is found on the straight line between the losses of two tones, 0.01 Hz to either side of
    where the entry has it.
    """
    check = entry("D13")
    expected, chain = check.expected[str(line)], f"notch_{line}"
    assert line / check.input["Q"] == pytest.approx(expected["minus3dB_width_Hz"], abs=1e-5)
    edges, half = [], 10 * log10(2)
    for side in ("low", "high"):
        names = [f"{side}_{line}_{tone}" for tone in "ab"]
        tones_hz = [filter_tones()[name] for name in names]
        assert tones_hz[1] - tones_hz[0] == pytest.approx(2 * BESIDE_EDGE_HZ)
        losses = [loss_db(published, chain, name) for name in names]
        assert min(losses) < half < max(losses)
        share = (half - losses[0]) / (losses[1] - losses[0])
        edges.append(tones_hz[0] + share * (tones_hz[1] - tones_hz[0]))
    assert edges[1] - edges[0] == pytest.approx(expected["minus3dB_width_Hz"], abs=check.tolerance)
    middle = RATE_HZ / pi * np.arctan(sqrt(np.prod([tan(pi * f / RATE_HZ) for f in edges])))
    assert middle == pytest.approx(expected["edges_warped_geometric_mean_Hz"], abs=check.tolerance)
    left = sqrt(power(published, chain, f"line_{line}") / (FILTERED_UV**2 / 2))
    assert left == pytest.approx(expected["gain_at_f0"], abs=check.tolerance)
    passed = power(published, chain, "steady") / power(published, "unfiltered", "steady")
    assert sqrt(passed) == pytest.approx(expected["gain_dc"], abs=check.tolerance)
