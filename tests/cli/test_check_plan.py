"""``check --plan`` says how every step on samples is run, and why where it is not fused."""

from pathlib import Path

import numpy as np
import pytest

from running import command, write_eeg

HEAD = """\
recipe: planned
edition: 1
title: What is fused
purpose: To be planned
signals:
  frontal: {labels: ["EEG Fp1-F7"], unit: uV, modality: eeg}
chains:
"""
CHAIN = """\
  {name}:
    - load: {{signals: [frontal]}}
{steps}
    - epoch.consecutive: {{length: 4 s}}
    - spectrum.periodogram: {{}}
    - feature.spectral_edge: {{within: [5 Hz, 15 Hz]}}
    - export.table: {{}}
"""
BAND, NOTCH, DOWN, AMPLITUDE = (
    "filter.butterworth: {high_pass: 0.5 Hz, low_pass: 40 Hz}",
    "filter.notch: {line: 50 Hz}",
    "resample: {rate: 128 Hz}",
    "exclude.amplitude: {range: 300 uV, window: 1 s}",
)
CHAINS = {
    "all": [BAND, NOTCH, DOWN, AMPLITUDE],
    "between": [AMPLITUDE, BAND, AMPLITUDE, DOWN],
    "kept": [f"{BAND}\n      keep: true", NOTCH, DOWN],
    "slow": ["filter.butterworth: {high_pass: 1 mHz}", NOTCH],
}


def lines(printed: str, chain: str) -> dict[str, str]:
    """Return step -> what is said of it."""
    found: dict[str, str] = {}
    inside = False
    for line in printed.splitlines():
        if not line.startswith("  "):
            inside = line.startswith(f"{chain} (")
        elif inside:
            step, said = line.strip().split(maxsplit=1)
            found[step] = said
    return found


@pytest.fixture(scope="module")
def printed(tmp_path_factory: pytest.TempPathFactory) -> tuple[str, str]:
    """Return what is printed for the recipe alone, and with a recording at 256 Hz."""
    folder = tmp_path_factory.mktemp("planned")
    chains = [
        CHAIN.format(name=name, steps="\n".join(f"    - {step}" for step in steps))
        for name, steps in CHAINS.items()
    ]
    recipe = folder / "recipe.yaml"
    recipe.write_text(HEAD + "".join(chains))
    write_eeg(folder / "a.edf", np.zeros(60 * 256), 256)
    done = [command("check", recipe, *more, "--plan") for more in ((), (folder / "a.edf",))]
    assert [d.returncode for d in done] == [0, 0], done[0].stderr + done[1].stderr + done[0].stdout
    return done[0].stdout, done[1].stdout


@pytest.mark.parametrize("with_recording", [0, 1])
def test_every_step_on_samples_is_told(printed: tuple[str, str], with_recording: int) -> None:
    text = printed[with_recording]
    for chain, steps in CHAINS.items():
        said = lines(text, chain)
        names = [step.split(":")[0] for step in steps]
        assert said.pop("epoch.consecutive") == "given samples as float32"
        assert len(said) == len(names)
        assert {name.split("#")[0] for name in said} == set(names)
    whole = "fused, as one response: filter.butterworth + filter.notch + resample"
    for step in ("filter.butterworth", "filter.notch", "resample"):
        assert lines(text, "all")[step].startswith(whole)
    assert "declares no response" in lines(text, "all")["exclude.amplitude"]
    between = lines(text, "between")
    assert "only one step" in between["filter.butterworth"]
    assert "exclude.amplitude#2 declares no response" in between["filter.butterworth"]
    assert between["resample"].startswith("by its response, alone")
    kept = lines(text, "kept")
    assert "what filter.butterworth gives is kept" in kept["filter.butterworth"]
    assert "fused, as one response: filter.notch + resample" in kept["resample"]


def test_how_epochs_are_given_samples_is_told(tmp_path: Path) -> None:
    low = [BAND.replace("high_pass: 0.5 Hz, ", ""), DOWN]
    for head, steps, held in (
        (HEAD, [BAND, DOWN], "float32"),
        (HEAD, low, "float64"),
        (HEAD.replace("edition: 1", "edition: 1\nprecision: double"), [BAND, DOWN], "float64"),
    ):
        recipe = tmp_path / "recipe.yaml"
        chain = CHAIN.format(name="one", steps="\n".join(f"    - {step}" for step in steps))
        recipe.write_text(head + chain)
        printed = command("check", recipe, "--plan").stdout
        assert lines(printed, "one")["epoch.consecutive"] == f"given samples as {held}"


def test_what_only_the_rate_decides_is_told_with_a_recording(printed: tuple[str, str]) -> None:
    assert "frontal at 256 Hz" in printed[1]
    assert "in blocks of 150 s" in lines(printed[1], "all")["filter.notch"]
    assert "in blocks" not in lines(printed[0], "all")["filter.notch"]
    assert "samples, more than" in lines(printed[1], "slow")["filter.notch"]
