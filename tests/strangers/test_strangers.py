"""Packages of stages from outside: one that works, one that fails, one that claims a taken name.

They are found by entry point, as installed packages are; nothing about them is told to the engine.
"""

import csv
import json
import os
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from running import only_run, rows, write_eeg

HERE = Path(__file__).parent

RECIPE = """\
recipe: with-strangers
edition: 1
title: Stages from outside
purpose: To show that they get everything the shipped ones get
signals:
  frontal: {labels: ["EEG Fp1-F7"], unit: uV, modality: eeg}
chains:
  one:
    - load: {signals: [frontal]}
    - acme.smooth: {length: 50 ms}
    - acme.peaks: {above: 90 %}
    - epoch.consecutive: {length: 10 s}
    - acme.range: {}
    - export.table: {}
  passed:
    - load: {signals: [frontal]}
    - filter.butterworth: {high_pass: 1 Hz, widen: 1 s}
    - epoch.consecutive: {length: 10 s}
    - acme.range: {}
    - export.table: {}
  two:
    - load: {signals: [frontal]}
    - acme.centre: {}
    - epoch.consecutive: {length: 10 s}
    - acme.range: {}
    - export.table: {}
"""


def waveassay(*arguments: object, packages: str) -> subprocess.CompletedProcess[str]:
    known = os.environ.get("PYTHONPATH", "").split(os.pathsep)
    path = os.pathsep.join([*(str(HERE / name) for name in packages.split()), *filter(None, known)])
    return subprocess.run(
        [sys.executable, "-m", "waveassay", *map(str, arguments)],
        env={**os.environ, "PYTHONPATH": path},
        capture_output=True,
        text=True,
        timeout=300,
    )


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Write a recipe and 25 minutes at 100 Hz: three stretches, large values in two of them."""
    folder = tmp_path_factory.mktemp("strangers")
    (folder / "recipe.yaml").write_text(RECIPE)
    rng = np.random.default_rng(20310405)
    x = np.round(rng.uniform(-100, 100, 25 * 60 * 100) + 40, 1)
    x[140_000:140_010] = 3000.0
    x[700:705] = 2990.0
    write_eeg(folder / "recordings" / "a.edf", x, 100)
    np.save(folder / "x.npy", x)
    return folder


@pytest.fixture(scope="module")
def run_folder(made: Path) -> Path:
    done = waveassay("run", made, packages="working")
    assert done.returncode == 0, done.stderr + done.stdout
    return only_run(made)


def test_a_step_that_needs_the_whole_recording_is_right_in_every_stretch(
    made: Path, run_folder: Path
) -> None:
    x = np.load(made / "x.npy")
    smooth = np.convolve(np.pad(x, 2, mode="edge"), np.ones(5) / 5, mode="valid")
    near = np.flatnonzero(np.abs(smooth) > 0.9 * np.abs(smooth).max()) // 1000
    table = rows(run_folder, "epochs/one")
    lost = {int(row["epoch"]) for row in table if row["kept"] == "false"}
    assert lost == set(near.tolist())
    assert len(lost) == 2  # the large values are in the first and in the last stretch
    for row in table:
        if row["kept"] == "true":
            start = int(row["epoch"]) * 1000
            expected = np.ptp(smooth[start : start + 1000])
            assert float(row["range"]) == pytest.approx(expected, abs=0.11)  # 0.1 uV a step


def test_a_step_that_declares_nothing_is_given_whole_pieces(made: Path, run_folder: Path) -> None:
    table = rows(run_folder, "epochs/two")
    assert len(table) == 150
    x = np.load(made / "x.npy")
    for row in table:
        start = int(row["epoch"]) * 1000
        expected = np.ptp(x[start : start + 1000])
        assert float(row["range"]) == pytest.approx(expected, abs=0.11)


def test_a_step_that_knows_nothing_of_float32_just_works(made: Path, run_folder: Path) -> None:
    """Its epochs are float32 behind a high-pass, unless the recipe asks for double."""
    told = {
        (row["chain"], row["value"])
        for row in rows(run_folder, "derived")
        if row["quantity"] == "samples given as"
    }
    assert told == {("one", "float64"), ("two", "float64"), ("passed", "float32")}
    double = made / "double.yaml"
    double.write_text(RECIPE.replace("edition: 1", "edition: 1\nprecision: double"))
    done = waveassay("run", double, made / "recordings", "--into", made / "d", packages="working")
    assert done.returncode == 0, done.stderr + done.stdout
    for chain in ("one", "passed", "two"):
        tables = (rows(folder, f"epochs/{chain}") for folder in (run_folder, only_run(made / "d")))
        for row, same in zip(*tables, strict=True):
            ranges = [float(each.pop("range") or "nan") for each in (row, same)]
            assert row == same
            assert ranges[0] == pytest.approx(ranges[1], rel=1e-6, nan_ok=True)


def test_provenance_comes_without_a_line_of_its_author(run_folder: Path) -> None:
    parameters = (run_folder / "parameters.csv").read_text()
    assert "one.acme.smooth,length,0.05,s,recipe," in parameters
    steps = {row["step"] for row in rows(run_folder, "steps")}
    assert {"acme.smooth", "acme.peaks", "acme.range", "acme.centre"} <= steps
    with (run_folder / "columns.csv").open(newline="") as file:
        columns = {(row["table"], row["column"]): row for row in csv.DictReader(file)}
    assert columns["epochs/one", "range"]["unit"] == "uV"
    assert "acme" in (run_folder / "environment.json").read_text()


def test_check_schema_and_help_know_it(made: Path) -> None:
    wrong = made / "wrong.yaml"
    wrong.write_text(RECIPE.replace("length: 50 ms", "length: 50 Hz"))
    checked = waveassay("check", wrong, packages="working")
    assert checked.returncode == 2
    assert "wrong.yaml:10:29:" in checked.stderr
    assert "acme.smooth" in waveassay("schema", packages="working").stdout
    shown = waveassay("stages", "acme.smooth", packages="working").stdout
    assert "Length of the average." in shown
    assert "acme 1.2" in shown


def test_its_response_is_one_with_its_neighbours(made: Path) -> None:
    fused = made / "fused.yaml"
    fused.write_text(
        RECIPE.replace("    - acme.peaks: {above: 90 %}", "    - resample: {rate: 50 Hz}")
    )
    checked = waveassay("check", fused, "--plan", packages="working")
    assert checked.returncode == 0, checked.stderr
    assert "fused, as one response: acme.smooth + resample" in checked.stdout
    told = " ".join(checked.stdout.split())
    assert "acme.centre by its own function (declares no response)" in told
    done = waveassay(
        "run", fused, made / "recordings", "--into", made / "fused", packages="working"
    )
    assert done.returncode == 0, done.stderr + done.stdout
    assert len(rows(only_run(made / "fused"), "epochs/one")) == 150


def test_a_package_that_fails_is_named_and_stops_no_other(made: Path) -> None:
    listed = waveassay("stages", packages="failing working")
    assert listed.returncode == 0
    assert "broken 0.3" in listed.stdout
    assert "the library it needs is not installed" in listed.stdout
    assert "acme.smooth" in listed.stdout
    wrong = made / "missing.yaml"
    wrong.write_text(RECIPE.replace("acme.smooth", "broken.smooth"))
    checked = waveassay("check", wrong, packages="failing working")
    assert checked.returncode == 2
    assert "broken 0.3" in checked.stderr


def test_a_taken_name_stays_with_its_owner_and_the_claim_is_told() -> None:
    listed = waveassay("stages", packages="claiming").stdout
    assert "clash 2.0" in listed
    assert "filter.notch" in listed
    shown = waveassay("stages", "filter.notch", packages="claiming").stdout
    assert "waveassay" in shown.splitlines()[0]


def test_a_recipe_that_uses_a_contested_name_is_told_whose_stage_it_has(made: Path) -> None:
    recipe = made / "contested.yaml"
    notch = RECIPE.replace("acme.smooth: {length: 50 ms}", "filter.notch: {line: 50 Hz}")
    recipe.write_text(notch)
    told = waveassay("check", recipe, packages="claiming working")
    assert told.returncode == 0, told.stderr
    said = told.stderr + told.stdout
    assert "contested.yaml:10:7: W404 one.filter.notch: this is the stage of waveassay" in said
    assert "its name is also claimed by clash 2.0 (clash_stages.notch)" in said
    assert "W404" not in (alone := waveassay("check", recipe, packages="working")).stderr
    assert "W404" not in alone.stdout


def test_a_stage_whose_parameters_cannot_be_shown_stops_no_command(made: Path) -> None:
    listed = waveassay("stages", packages="careless working")
    assert listed.returncode == 0
    assert "careless.text" in listed.stdout
    assert "careless_stages.unready: stage 'careless.unready': takes is" in listed.stdout
    shown = waveassay("stages", "careless.text", packages="careless")
    assert shown.returncode == 0
    assert "no schema of its parameters can be made" in shown.stdout
    assert shown.stderr == ""
    schema = waveassay("schema", packages="careless working")
    assert schema.returncode == 0
    assert "left out: careless.text (careless 0.1): no schema" in schema.stderr
    assert "Traceback" not in schema.stderr
    known = json.loads(schema.stdout)["$defs"]
    assert "careless.text" not in known
    recipe = made / "careless.yaml"
    recipe.write_text(RECIPE.replace("acme.smooth: {length: 50 ms}", "careless.text: {}"))
    checked = waveassay("check", recipe, packages="careless working")
    assert checked.returncode == 2
    assert "careless.yaml:10:7: R310 one.careless.text: the stage of careless 0.1" in checked.stderr
    assert "acme.smooth" in known


def test_a_stage_that_was_edited_is_never_answered_from_the_store(tmp_path: Path) -> None:
    """Its author forgot to raise the version."""
    shutil.copytree(HERE / "working", tmp_path / "edited")
    (tmp_path / "recipe.yaml").write_text(RECIPE)
    x = np.round(np.random.default_rng(2).uniform(-100, 100, 60 * 100), 1)
    write_eeg(tmp_path / "recordings" / "a.edf", x, 100)
    first = waveassay("run", tmp_path, packages=str(tmp_path / "edited"))
    assert first.returncode == 0, first.stderr
    module = tmp_path / "edited" / "acme_stages" / "range.py"
    module.write_text(module.read_text().replace("np.ptp(", "2 * np.ptp("))
    second = waveassay("run", tmp_path, packages=str(tmp_path / "edited"))
    assert "finished before" not in second.stdout
    old, new = sorted((tmp_path / "runs").glob("with-strangers-*"))
    for one, other in zip(rows(old, "epochs/two"), rows(new, "epochs/two"), strict=True):
        assert float(other["range"]) == 2 * float(one["range"])
