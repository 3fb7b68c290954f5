"""What is odd about a file is told, and what a recipe says of it is done."""

from pathlib import Path

import numpy as np
import pytest

from edf_bytes import Sig, build
from running import rows, run, write_eeg

RECIPE = """\
recipe: reading
edition: 1
title: Reading
purpose: To see what odd files give
signals:
  frontal: {labels: ["EEG Fp1-F7"], unit: uV, modality: eeg}
chains:
  cortex:
    - load: {signals: [frontal]}
    - filter.butterworth: {high_pass: 0.5 Hz, low_pass: 30 Hz}
    - resample: {rate: 64 Hz}
    - epoch.consecutive: {length: 4 s}
    - spectrum.multitaper: {half_bandwidth: 0.75 Hz}
    - feature.spectral_edge: {within: [0.5 Hz, 25 Hz]}
    - export.table: {}
"""


def noise(seconds: int) -> np.ndarray:
    return 30 * np.random.default_rng(3).standard_normal(seconds * 128)


def test_a_cut_file_is_read_as_far_as_it_goes_when_the_recipe_says_so(tmp_path: Path) -> None:
    path = write_eeg(tmp_path / "in" / "a.edf", noise(120), 128)
    path.write_bytes(path.read_bytes()[:-5000])
    refused = run(RECIPE, [path], tmp_path / "one")
    assert refused.results[0].status == "failed"
    assert "truncated: read" in refused.results[0].message
    asked = RECIPE.replace("signals: [frontal]}", "signals: [frontal], truncated: read}")
    outcome = run(asked, [path], tmp_path / "two")
    assert outcome.results[0].status == "done_with_warnings"
    assert "ends after" in outcome.results[0].message
    whole = write_eeg(tmp_path / "whole" / "a.edf", noise(120), 128)
    full = rows(run(asked, [whole], tmp_path / "three").folder, "epochs/cortex")
    cut = rows(outcome.folder, "epochs/cortex")
    assert 0 < len(cut) < len(full) == 30
    inside = [r for r in cut if r["kept"] == "true"]
    for row, same in zip(inside[:-5], [r for r in full if r["kept"] == "true"], strict=False):
        assert float(row["spectral_edge"]) == pytest.approx(float(same["spectral_edge"]), rel=1e-6)


@pytest.mark.parametrize("with_filter", [True, False])
def test_samples_outside_the_digital_limits_are_told(tmp_path: Path, with_filter: bool) -> None:
    values = [0] * (128 * 60)
    values[4000] = 2000
    content = build([Sig("EEG Fp1-F7", 128, dmin=-1000, dmax=1000, data=values)], 60)
    path = tmp_path / "a.edf"
    path.write_bytes(content)
    text = RECIPE
    if not with_filter:
        text = "\n".join(
            line for line in RECIPE.splitlines() if "filter" not in line and "resample" not in line
        )
    outcome = run(text, [path], tmp_path / "out")
    assert outcome.results[0].status == "done_with_warnings"
    assert "EEG Fp1-F7: some samples lie outside the digital limits" in outcome.results[0].message


def test_what_follows_from_the_rate_is_written_down(tmp_path: Path) -> None:
    path = write_eeg(tmp_path / "a.edf", noise(60), 128)
    outcome = run(RECIPE, [path], tmp_path / "out")
    known = {(r["step"], r["quantity"]): r for r in rows(outcome.folder, "derived")}
    gain = known["filter.butterworth", "gain at high_pass"]
    assert float(gain["value"]) == pytest.approx(-3.0103, abs=1e-4)  # as cutoff_at asks
    assert gain["unit"] == "dB"
    assert known["resample", "ratio"]["value"] == "1/2"
    assert known["epoch.consecutive", "length"]["value"] == "256"
    assert known["spectrum.multitaper", "tapers"]["value"] == "5"  # floor(2 x 0.75 x 4) - 1
    assert known["spectrum.multitaper", "time-bandwidth product NW"]["value"] == "3"
