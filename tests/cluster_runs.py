"""Recordings, profiles and a moment to wait, for tests of runs on a cluster."""

import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np

from running import write_eeg
from waveassay.execute.snakemake.profile import shipped_profiles

RECIPE = """\
recipe: cluster
edition: 1
title: To be run elsewhere
purpose: To see that it is the same
signals:
  frontal: {labels: ["EEG Fp1-F7"], unit: uV, modality: eeg}
chains:
  cortex:
    - load: {signals: [frontal]}
    - filter.butterworth: {high_pass: 0.5 Hz, low_pass: 40 Hz}
    - epoch.consecutive: {length: 4 s, overlap: 50 %}
    - spectrum.multitaper: {half_bandwidth: 0.75 Hz}
    - feature.spectral_edge: {within: [0.5 Hz, 30 Hz]}
    - export.table: {}
"""


def working_directory(folder: Path, recordings: int, length_s: int) -> Path:
    """Write a recipe and recordings of noise."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "recipe.yaml").write_text(RECIPE)
    for seed in range(recordings):
        x = 30 * np.random.default_rng(seed).standard_normal(length_s * 128)
        write_eeg(folder / "recordings" / f"p{seed:02}.edf", x, 128)
    return folder


def profile(folder: Path, text: str) -> Path:
    """Write a profile."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "config.yaml").write_text(text)
    return folder


def slurm_profile(folder: Path, **changes: object) -> Path:
    """Write the profile for Slurm that ships, with some of its plain values changed."""
    lines = (shipped_profiles() / "slurm" / "config.yaml").read_text().splitlines()
    for key, value in {"slurm-init-seconds-before-status-checks": 5, **changes}.items():
        name = str(key).replace("mem_mb", "  mem_mb")
        at = [number for number, line in enumerate(lines) if line.startswith(f"{name}:")]
        assert len(at) == 1, f"the shipped profile has no line for {key}"
        lines[at[0]] = f"{name}: {value}"
    return profile(folder, "\n".join(lines) + "\n")


def local_profile(folder: Path, **changes: object) -> Path:
    """Write the profile for Slurm that ships, but with jobs done on this machine."""
    text = (slurm_profile(folder, **changes) / "config.yaml").read_text()
    kept = [line for line in text.splitlines() if not line.startswith("slurm-")]
    return profile(folder, "\n".join(kept).replace("executor: slurm", "executor: local"))


def start(working: Path, into: Path, cluster: Path) -> subprocess.Popen[str]:
    """Start a run in a session of its own."""
    return subprocess.Popen(
        [
            *(sys.executable, "-m", "waveassay", "run", str(working)),
            *("--into", str(into), "--cluster", str(cluster)),
        ],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )


def wait_until(met: Callable[[], bool], seconds: float = 60) -> None:
    """Wait for something to come true."""
    end = time.monotonic() + seconds
    while not met():
        assert time.monotonic() < end, "it never came to that"
        time.sleep(0.1)
