"""Runs in which something is odd: files that change, names that clash, results that are damaged."""

import os
from collections.abc import Callable
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest

from running import rows, run, write_eeg
from waveassay.contract import Interval
from waveassay.execute.in_process import run_in_process
from waveassay.execute.runner import JobEvent
from waveassay.recipe import RecipeError, check_recipe

RECIPE = """\
recipe: odd
edition: 1
title: Odd runs
purpose: To see what happens
signals:
  frontal: {labels: ["EEG Fp1-F7"], unit: uV, modality: eeg}
chains:
  cortex:
    - load: {signals: [frontal]}
    - filter.butterworth: {high_pass: 0.5 Hz, low_pass: 30 Hz}
    - epoch.consecutive: {length: 4 s}
    - spectrum.periodogram: {}
    - feature.spectral_edge: {within: [0.5 Hz, 25 Hz]}
    - export.table: {}
    - spectrum.average: {}
    - export.figure: {show: spectrum}
"""
CONDITION = "chains:\n"


def noise(seconds: int, seed: int) -> np.ndarray:
    return 30 * np.random.default_rng(seed).standard_normal(seconds * 128)


def test_a_recording_that_changes_while_the_run_goes_on_fails_and_poisons_nothing(
    tmp_path: Path,
) -> None:
    """Overwritten by another of equal size between planning and work."""
    path = write_eeg(tmp_path / "a.edf", noise(60, 1), 128)
    original = path.read_bytes()
    other = write_eeg(tmp_path / "other" / "a.edf", noise(60, 2), 128).read_bytes()
    assert len(other) == len(original)

    def swapping(folder: Path, workers: int, on_event: Callable[[JobEvent], None]) -> str | None:
        path.write_bytes(other)
        return run_in_process(folder, workers, on_event)

    swapped = run(RECIPE, [path], tmp_path / "out", runner=swapping)
    assert swapped.results[0].status == "failed"
    assert "changed or removed after it was examined" in swapped.results[0].message
    path.write_bytes(original)
    again = run(RECIPE, [path], tmp_path / "out")
    alone = run(RECIPE, [path], tmp_path / "alone")
    assert again.results_digest == alone.results_digest


def test_a_condition_that_lies_in_a_gap_gives_empty_tables_and_a_warning(tmp_path: Path) -> None:
    pieces = [Interval(Fraction(0), Fraction(30)), Interval(Fraction(60), Fraction(90))]
    path = write_eeg(tmp_path / "a.edf", noise(60, 3), 128, pieces=pieces)
    text = RECIPE.replace(
        CONDITION, "conditions:\n  gap: {start: {time: 35 s}, length: 10 s}\nchains:\n"
    )
    outcome = run(text, [path], tmp_path / "out")
    assert outcome.results[0].status == "done_with_warnings"
    assert "condition gap of frontal: no epoch fits in it" in outcome.results[0].message
    (row,) = rows(outcome.folder, "summary")
    assert row["n"] == "0"
    (excluded,) = [r for r in rows(outcome.folder, "excluded") if r["reason"] == "gap"]
    assert float(excluded["share_of_condition"]) == 1


@pytest.mark.parametrize("name", ["kept", "epoch", "start_s", "condition", "missing_reason"])
def test_an_output_may_not_be_called_like_a_column_of_every_table(name: str) -> None:
    text = RECIPE.replace(
        "within: [0.5 Hz, 25 Hz]}\n", f"within: [0.5 Hz, 25 Hz]}}\n      as: {name}\n"
    )
    (problem,) = check_recipe(text, "r.yaml").errors
    assert "R304" in str(problem)
    assert "is a column of every table" in str(problem)


def test_figures_whose_names_would_be_one_are_numbered(tmp_path: Path) -> None:
    write_eeg(tmp_path / "in" / "p 1.edf", noise(30, 4), 128)
    write_eeg(tmp_path / "in" / "p_1.edf", noise(30, 5), 128)
    outcome = run(RECIPE, [tmp_path / "in"], tmp_path / "out")
    names = sorted(path.name for path in (outcome.folder / "figures").rglob("*.png"))
    assert names == ["p_1.frontal.spectrum-2.png", "p_1.frontal.spectrum.png"]


def test_one_damaged_result_fails_its_recording_alone_and_is_made_again(tmp_path: Path) -> None:
    for seed in range(3):
        write_eeg(tmp_path / "in" / f"p{seed}.edf", noise(30, seed), 128)
    first = run(RECIPE, [tmp_path / "in"], tmp_path / "out")
    facts = sorted((tmp_path / "out" / "store" / "objects").rglob("passage.json"))
    facts[0].write_text("{}")
    (facts[1].parent / "artefact.json").write_text('{"files": ')
    text = "# another run\n" + RECIPE
    second = run(text, [tmp_path / "in"], tmp_path / "out")
    assert sorted(r.status for r in second.results) == ["done", "failed", "failed"]
    third = run(text, [tmp_path / "in"], tmp_path / "out")
    assert {r.status for r in third.results} == {"done"}
    assert third.results_digest == first.results_digest


def test_what_is_left_of_other_runs_never_stops_a_new_one(tmp_path: Path) -> None:
    path = write_eeg(tmp_path / "a.edf", noise(30, 6), 128)
    first = run(RECIPE, [path], tmp_path / "out")
    (first.folder / "log.jsonl").write_text("not a log\n")
    unfinished = first.folder.with_name(first.folder.name + "-9")
    unfinished.mkdir()
    (unfinished / "recipe.source.yaml").write_text(RECIPE)
    (unfinished / "log.jsonl").write_text("torn")
    (unfinished / "figures").symlink_to(tmp_path)
    second = run(RECIPE, [path], tmp_path / "out")
    assert second.results[0].status == "done"
    assert second.results_digest == first.results_digest
    assert path.exists()


def test_recipes_with_windows_line_ends_are_recognised_as_done(tmp_path: Path) -> None:
    path = write_eeg(tmp_path / "a.edf", noise(30, 7), 128)
    text = RECIPE.replace("\n", "\r\n")
    run(text, [path], tmp_path / "out")
    assert run(text, [path], tmp_path / "out").already


def test_tables_hold_the_signals_that_their_step_takes(tmp_path: Path) -> None:
    """A step on signals that a recording lacks asks for nothing, stored or not."""
    path = write_eeg(tmp_path / "a.edf", noise(30, 8), 128)
    both = RECIPE.replace(
        "modality: eeg}\n",
        'modality: eeg}\n  other: {labels: ["none"], unit: uV, optional: true}\n',
    ).replace("signals: [frontal]}", "signals: [frontal, other]}")
    one = both.replace("export.table: {}", "export.table: {}\n      on: [other]")
    with_all = run(both, [path], tmp_path / "out")
    limited = run(one, [path], tmp_path / "out")
    fresh = run(one, [path], tmp_path / "fresh")
    assert (with_all.folder / "epochs" / "cortex.csv").exists()
    assert not (limited.folder / "epochs" / "cortex.csv").exists()
    assert limited.results_digest == fresh.results_digest


def test_each_stretch_of_a_condition_is_counted_once(tmp_path: Path) -> None:
    from waveassay.recording.facts import Annotation

    marks = [Annotation(Fraction(t), None, "x") for t in (5, 12)]
    path = write_eeg(tmp_path / "a.edf", noise(60, 9), 128, annotations=marks)
    text = RECIPE.replace(
        CONDITION,
        "conditions:\n  k: {start: {annotation: x, which: each}, length: 20 s}\nchains:\n",
    )
    outcome = run(text, [path], tmp_path / "out")
    assert outcome.results[0].status == "failed"
    assert "overlaps the next, from 12 s" in outcome.results[0].message


def test_two_runs_of_one_name_in_one_second_share_a_store(tmp_path: Path) -> None:
    """Their work stands in the store, each in a folder of its own."""
    from threading import Thread

    outcomes = {}

    def start(name: str, seed: int) -> None:
        path = write_eeg(tmp_path / name / "a.edf", noise(60, seed), 128)
        outcomes[name] = run(RECIPE, [path], tmp_path / f"into-{name}", store=tmp_path / "store")

    threads = [Thread(target=start, args=(name, seed)) for seed, name in enumerate("ab")]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert {o.results[0].status for o in outcomes.values()} == {"done"}


def test_an_unsound_recipe_is_an_error_before_anything_is_made(tmp_path: Path) -> None:
    with pytest.raises(RecipeError):
        run(RECIPE.replace("4 s", "4 Hz"), [tmp_path], tmp_path / "out")
    assert os.listdir(tmp_path) == []
