"""The commands as typed: what they print, where, and their exit codes."""

import json
from pathlib import Path

import jsonschema
import numpy as np
import pytest
import yaml

from running import command, only_run, write_eeg

RECIPE = """\
recipe: commands
edition: 2
title: For the command line
purpose: To be typed
signals:
  frontal: {labels: ["EEG Fp1-F7"], unit: uV, modality: eeg}
chains:
  cortex:
    - load: {signals: [frontal]}
    - epoch.consecutive: {length: 4 s}
    - spectrum.periodogram: {}
    - feature.spectral_edge: {within: [0.5 Hz, 30 Hz]}
    - export.table: {}
"""
COMMANDS = ("run", "check", "describe", "stages", "recipes", "schema", "example")


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Write a working directory with two recordings, one of them cut."""
    folder = tmp_path_factory.mktemp("commands")
    (folder / "recipe.yaml").write_text(RECIPE)
    x = 30 * np.random.default_rng(1).standard_normal(60 * 128)
    write_eeg(folder / "recordings" / "good.edf", x, 128)
    cut = write_eeg(folder / "recordings" / "site" / "bad.edf", x, 128)
    cut.write_bytes(cut.read_bytes()[:-100])
    return folder


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_explains_itself(name: str) -> None:
    done = command(name, "--help")
    assert done.returncode == 0
    assert "Usage:" in done.stdout
    assert "Traceback" not in done.stderr


def test_help_lists_every_command_and_says_what_the_tool_is_not() -> None:
    done = command("--help")
    for name in COMMANDS:
        assert f"\n  {name} " in done.stdout
    assert "never for monitoring" in " ".join(done.stdout.split())


def test_run_names_the_failed_recording_and_does_the_other(made: Path, tmp_path: Path) -> None:
    done = command("run", made, "--into", tmp_path)
    assert done.returncode == 3
    assert "failed   site/bad:" in done.stdout
    assert "1 recording done, 1 failed." in done.stdout
    folder = only_run(tmp_path)
    assert str(folder) in done.stdout
    digest = json.loads((folder / "manifest.json").read_text())["results"]["sha256"]
    assert f"Results digest: {digest}" in done.stdout
    assert "not for monitoring" in done.stdout


def test_both_forms_of_run_give_the_same(made: Path, tmp_path: Path) -> None:
    good = made / "recordings" / "good.edf"
    one = command("run", made / "recipe.yaml", good, "--into", tmp_path / "one", "--workers", 1)
    assert one.returncode == 0, one.stderr
    work = tmp_path / "work"
    (work / "recordings").mkdir(parents=True)
    (work / "recipe.yaml").write_text(RECIPE)
    (work / "recordings" / "good.edf").write_bytes(good.read_bytes())
    two = command("run", work)
    assert two.returncode == 0, two.stderr
    assert (work / "store").is_dir()
    line = next(line for line in one.stdout.splitlines() if "digest" in line)
    assert line in two.stdout


@pytest.mark.parametrize(
    ("arguments", "told"),
    [
        (("run", "{made}/recipe.yaml"), "Name the recordings after the recipe"),
        (("run", "{made}/recipe.yaml", "{made}/recordings"), "--into DIR"),
        (("run", "{made}/recipe.yaml", "{made}/none.edf", "--into", "{out}"), "no such file"),
        (("run", "{made}/recipe.yaml", "{made}/empty", "--into", "{out}"), "no recording in"),
        (("run", "{made}/empty"), "there is no recipe.yaml in it"),
        (("run", "frontal-spectre", "{made}/recordings", "--into", "{out}"), "frontal-spectra"),
        (("check", "{made}/none.yaml"), "none.yaml"),
        (("stages", "filter.butterwort"), "filter.butterworth"),
        (("recipes", "frontal-spectre"), "frontal-spectra"),
        (("describe", "{made}/none.edf"), "no such file"),
        (("runn",), "No such command"),
        (("run", "{made}", "--workers", "0"), "--workers"),
    ],
)
def test_wrong_usage_is_2_with_what_to_do(
    made: Path, tmp_path: Path, arguments: tuple[str, ...], told: str
) -> None:
    (made / "empty").mkdir(exist_ok=True)
    done = command(*(a.format(made=made, out=tmp_path / "out") for a in arguments))
    assert done.returncode == 2, done.stdout + done.stderr
    assert told in done.stderr
    assert "Traceback" not in done.stderr
    assert not (tmp_path / "out" / "runs").exists()


def test_an_unsound_recipe_is_2_with_every_line(made: Path, tmp_path: Path) -> None:
    wrong = tmp_path / "wrong.yaml"
    wrong.write_text(RECIPE.replace("4 s", "4 Hz").replace("within", "whithin"))
    done = command("check", wrong)
    assert done.returncode == 2
    lines = done.stderr.splitlines()
    assert any(line.startswith(f"{wrong}:10:35: ") for line in lines), lines
    assert any(line.startswith(f"{wrong}:12:") and "within" in line for line in lines)
    ran = command("run", wrong, made / "recordings", "--into", tmp_path / "out")
    assert ran.returncode == 2
    assert not (tmp_path / "out").exists()


def test_check_says_which_recordings_would_fail(made: Path) -> None:
    alone = command("check", made / "recipe.yaml")
    assert alone.returncode == 0
    assert "sound" in alone.stdout
    done = command("check", made / "recipe.yaml", made / "recordings")
    assert done.returncode == 3
    assert "would fail  site/bad:" in done.stdout
    assert "1 of 2 recordings would run." in done.stdout


def test_describe_says_what_is_there_and_what_cannot_be_read(made: Path) -> None:
    done = command("describe", made / "recordings")
    assert done.returncode == 3
    assert "EEG Fp1-F7  128 Hz  uV" in done.stdout
    assert "site/bad: cannot be read" in done.stdout


def test_stages_shows_parameters_with_units_and_defaults() -> None:
    listed = command("stages").stdout
    assert "filter.butterworth" in listed
    shown = command("stages", "filter.butterworth").stdout
    for part in ("high_pass", "such as", "default", "Butterworth"):
        assert part in shown


def test_recipes_are_listed_shown_and_copied_once(tmp_path: Path) -> None:
    assert "frontal-spectra" in command("recipes").stdout
    text = command("recipes", "frontal-spectra").stdout
    copy = tmp_path / "mine.yaml"
    assert command("recipes", "frontal-spectra", "--copy", copy).returncode == 0
    assert copy.read_text() == text
    again = command("recipes", "frontal-spectra", "--copy", copy)
    assert again.returncode == 2
    assert "is there already" in again.stderr


def test_schema_is_a_schema_that_the_recipe_meets() -> None:
    schema = json.loads(command("schema").stdout)
    jsonschema.Draft202012Validator.check_schema(schema)
    jsonschema.validate(yaml.safe_load(RECIPE), schema)
    with pytest.raises(jsonschema.ValidationError):
        jsonschema.validate(yaml.safe_load(RECIPE.replace("epoch.c", "epoch.k")), schema)


def test_example_is_written_once(tmp_path: Path) -> None:
    done = command("example", tmp_path / "ex")
    assert done.returncode == 0
    assert f"waveassay run {tmp_path / 'ex'}" in done.stdout
    assert (tmp_path / "ex" / "recipe.yaml").exists()
    again = command("example", tmp_path / "ex")
    assert again.returncode == 2
    assert "not empty" in again.stderr


def test_nothing_heavy_is_loaded_for_help(made: Path) -> None:
    import subprocess
    import sys

    code = (
        "import sys; sys.argv = ['waveassay', '--help']\n"
        "from waveassay.cli import main\n"
        "try: main()\n"
        "except SystemExit: pass\n"
        "heavy = {'scipy', 'pandas', 'pyarrow', 'matplotlib', 'pint', 'snakemake'}\n"
        "print('HEAVY', sorted(heavy & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert "HEAVY []" in done.stdout


def test_version_and_check_of_a_working_directory(made: Path) -> None:
    from importlib.metadata import version

    assert command("--version").stdout.strip() == f"waveassay {version('waveassay')}"
    done = command("check", made)
    assert done.returncode == 3
    assert "1 of 2 recordings would run." in done.stdout
    nowhere = command("run", made / "nowhere")
    assert nowhere.returncode == 2
    assert "there is no such file or folder" in nowhere.stderr
