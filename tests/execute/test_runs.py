"""What a run computes, what it takes from the store, and what it leaves."""

import csv
import json
import os
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from running import rows, run, write_eeg
from waveassay.execute.in_process import run_in_process
from waveassay.execute.run import RunOutcome, run_recipe
from waveassay.execute.runner import JobEvent
from waveassay.plan import stretches
from waveassay.plan.jobs import JobLength
from waveassay.plan.recordings import find_recordings
from waveassay.provenance import recording_digests
from waveassay.provenance.log_check import verify_log
from waveassay.recipe import check_recipe
from waveassay.recording.facts import Annotation

RECIPE = """\
recipe: frontal
edition: 1
title: Frontal power
purpose: To try the runner
signals:
  frontal: {labels: ["EEG Fp1-F7"], unit: uV, modality: eeg}
conditions:
  rest: {start: {annotation: rest}, length: 60 s}
chains:
  cortex:
    - load: {signals: [frontal]}
    - filter.butterworth: {high_pass: 0.5 Hz, low_pass: 40 Hz}
    - resample: {rate: 128 Hz}
    - exclude.amplitude: {range: 900 uV, window: 1 s}
    - epoch.consecutive: {length: 4 s, overlap: 50 %}
    - spectrum.multitaper: {half_bandwidth: 0.75 Hz}
    - feature.band_power: {bands: {alpha: [8 Hz, 13 Hz]}, express: absolute}
    - feature.spectral_edge: {within: [0.5 Hz, 30 Hz]}
    - export.table: {}
"""
WITHOUT_CONDITIONS = RECIPE.replace(
    "conditions:\n  rest: {start: {annotation: rest}, length: 60 s}\n", ""
)


def noise(seconds: int, rate_hz: int, seed: int) -> np.ndarray:
    rng = np.random.default_rng(seed)
    return np.clip(30 * rng.standard_normal(seconds * rate_hz), -3000, 3000)


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """Write three recordings of two minutes, each with an annotation."""
    from fractions import Fraction

    marks = [Annotation(Fraction(20), None, "rest")]
    for seed in range(3):
        x = noise(120, 256, seed)
        write_eeg(tmp_path / "in" / f"p{seed}.edf", x, 256, annotations=marks)
    return tmp_path


def table_bytes(outcome: RunOutcome) -> bytes:
    return (outcome.folder / "epochs" / "cortex.csv").read_bytes()


def test_an_identical_second_run_computes_and_writes_nothing(folder: Path) -> None:
    first = run(RECIPE, [folder / "in"], folder / "out")
    second = run(RECIPE, [folder / "in"], folder / "out")
    assert first.computed > 0
    assert not first.already
    assert second.already
    assert second.folder == first.folder
    assert second.results_digest == first.results_digest
    assert [r.recording for r in second.results] == ["p0", "p1", "p2"]
    assert len(list((folder / "out" / "runs").glob("frontal-1-*"))) == 1


def test_a_late_parameter_recomputes_only_what_follows_it(folder: Path) -> None:
    run(RECIPE, [folder / "in"], folder / "out")
    changed = run(RECIPE.replace("13 Hz", "12 Hz"), [folder / "in"], folder / "out")
    assert changed.reused == 3  # the filtered signal of each recording
    reused = {row["step"]: row["reused"] for row in rows(changed.folder, "steps")}
    assert reused["filter.butterworth"] == reused["exclude.amplitude"] == "true"
    assert reused["feature.band_power"] == reused["export.table"] == "false"


def test_comments_and_titles_recompute_nothing(folder: Path) -> None:
    first = run(RECIPE, [folder / "in"], folder / "out")
    text = RECIPE.replace("Frontal power", "Another title").replace("0.5 Hz, low", "500 mHz, low")
    second = run("# A comment\n" + text, [folder / "in"], folder / "out")
    assert second.computed == 0
    assert table_bytes(second) == table_bytes(first)
    assert second.folder != first.folder


def test_a_grown_set_computes_only_what_is_new_and_leaves_old_rows_alone(folder: Path) -> None:
    first = run(WITHOUT_CONDITIONS, [folder / "in"], folder / "out")
    write_eeg(folder / "in" / "p00.edf", noise(60, 256, 9), 256)
    second = run(WITHOUT_CONDITIONS, [folder / "in"], folder / "out")
    assert second.reused == first.computed
    old = [row for row in rows(second.folder, "epochs/cortex") if row["recording"] != "p00"]
    assert old == rows(first.folder, "epochs/cortex")


def test_a_bad_recording_fails_alone_and_leaves_no_rows(folder: Path) -> None:
    alone = run(RECIPE, [folder / "in"], folder / "alone")
    cut = (folder / "in" / "p1.edf").read_bytes()[:-5000]
    (folder / "in" / "cut.edf").write_bytes(cut)
    (folder / "in" / "empty.edf").touch()
    write_eeg(folder / "in" / "unmarked.edf", noise(60, 256, 5), 256)
    outcome = run(RECIPE, [folder / "in"], folder / "out")
    by_name = {r.recording: r for r in outcome.results}
    assert {n for n, r in by_name.items() if r.status == "failed"} == {"cut", "empty", "unmarked"}
    assert "records" in by_name["cut"].message
    assert "rest" in by_name["unmarked"].message
    assert table_bytes(outcome) == table_bytes(alone)
    listed = {row["recording"]: row["status"] for row in rows(outcome.folder, "recordings")}
    assert listed["cut"] == "failed"
    assert listed["p0"] == "done"


def test_a_failed_recording_is_tried_again(folder: Path) -> None:
    (folder / "in" / "p9.edf").touch()
    first = run(RECIPE, [folder / "in"], folder / "out")
    second = run(RECIPE, [folder / "in"], folder / "out")
    assert not second.already
    assert second.folder != first.folder
    assert second.computed == 0


def test_the_same_bytes_whatever_the_order_workers_and_names_of_folders(folder: Path) -> None:
    paths = sorted((folder / "in").iterdir())
    one = run(RECIPE, paths, folder / "one", workers=1)
    other = run(RECIPE, paths[::-1], folder / "two with spaces {x} $y", workers=7)
    assert one.results_digest == other.results_digest


def test_epochs_lie_in_their_condition_and_their_number_is_as_counted(folder: Path) -> None:
    outcome = run(RECIPE, [folder / "in"], folder / "out")
    table = [r for r in rows(outcome.folder, "epochs/cortex") if r["recording"] == "p0"]
    assert [float(r["start_s"]) for r in table] == [20 + 2 * k for k in range(29)]
    assert [int(r["epoch"]) for r in table] == list(range(29))
    assert {r["condition"] for r in table} == {"rest"}
    summary = {(r["recording"], r["feature"]): r for r in rows(outcome.folder, "summary")}
    alpha = np.array([float(r["band_power.alpha"]) for r in table])
    row = summary["p0", "band_power.alpha"]
    assert int(row["n"]) == 29
    assert float(row["mean"]) == pytest.approx(alpha.mean(), rel=1e-12)
    assert float(row["sd"]) == pytest.approx(alpha.std(ddof=1), rel=1e-12)
    assert float(row["median"]) == pytest.approx(np.median(alpha), rel=1e-12)


def test_stretches_change_no_mask_and_no_number(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Stretches of 20 s with context, against whole pieces, with an artefact in between."""
    from fractions import Fraction

    x = noise(150, 256, 4)
    x[70 * 256 : 71 * 256] += 2000.0
    path = write_eeg(folder / "long.edf", x, 256)
    monkeypatch.setattr(stretches, "STRETCH_S", Fraction(100_000))
    recipe = WITHOUT_CONDITIONS.replace("edition: 1\n", "edition: 1\nprecision: double\n")
    whole = rows(run(recipe, [path], folder / "whole").folder, "epochs/cortex")
    monkeypatch.setattr(stretches, "STRETCH_S", Fraction(20))
    cut = rows(run(recipe, [path], folder / "cut").folder, "epochs/cortex")
    assert len(whole) == len(cut) == 74
    assert {r["reason"] for r in whole} >= {"", "amplitude", "edge"}
    for one, other in zip(whole, cut, strict=True):
        for column in ("start_s", "kept", "reason", "condition", "epoch"):
            assert one[column] == other[column]
        for column in ("band_power.alpha", "spectral_edge"):
            if one["kept"] == "true":
                assert float(one[column]) == pytest.approx(float(other[column]), rel=1e-9)


def test_a_gap_is_never_crossed_and_is_counted(folder: Path) -> None:
    from fractions import Fraction

    from waveassay.contract import Interval

    pieces = [Interval(Fraction(0), Fraction(60)), Interval(Fraction(75), Fraction(135))]
    path = write_eeg(folder / "gap.edf", noise(120, 256, 8), 256, pieces=pieces)
    outcome = run(WITHOUT_CONDITIONS, [path], folder / "out")
    for row in rows(outcome.folder, "epochs/cortex"):
        start, stop = float(row["start_s"]), float(row["start_s"]) + float(row["duration_s"])
        assert stop <= 60 or start >= 75
    excluded = {r["reason"]: float(r["excluded_s"]) for r in rows(outcome.folder, "excluded")}
    assert excluded["gap"] == 15
    assert excluded["any"] == pytest.approx(excluded["gap"] + excluded["edge"])


def test_provenance_is_complete(folder: Path) -> None:
    outcome = run(RECIPE, [folder / "in"], folder / "out")
    names = {path.name for path in outcome.folder.iterdir()}
    assert names >= {
        "recipe.source.yaml", "recipe.resolved.yaml", "parameters.csv", "recordings.csv", "epochs",
        "summary.csv", "excluded.csv", "columns.csv", "steps.csv", "environment.json", "log.jsonl",
        "manifest.json",
    }  # fmt: skip
    assert (outcome.folder / "recipe.source.yaml").read_text() == RECIPE
    assert verify_log(outcome.folder / "log.jsonl").sound
    with (outcome.folder / "columns.csv").open(newline="") as file:
        described = {(row["table"], row["column"]) for row in csv.DictReader(file)}
    for table in ("epochs/cortex", "summary", "excluded"):
        for column in rows(outcome.folder, table)[0]:
            assert (table, column) in described


def test_resolved_recipe_gives_the_same_numbers(folder: Path) -> None:
    first = run(RECIPE, [folder / "in"], folder / "out")
    resolved = (first.folder / "recipe.resolved.yaml").read_text()
    second = run(resolved, [folder / "in"], folder / "out")
    assert second.computed == 0
    assert table_bytes(second) == table_bytes(first)


def test_a_stored_result_that_was_changed_is_found_and_made_again(folder: Path) -> None:
    first = run(RECIPE, [folder / "in"], folder / "out")
    for path in (folder / "out" / "store" / "objects").rglob("signals.arrays"):
        path.write_bytes(path.read_bytes()[:-1] + b"!")
    text = RECIPE.replace("13 Hz", "12 Hz")
    second = run(text, [folder / "in"], folder / "out")
    assert {r.status for r in second.results} == {"failed"}
    assert "stored result was changed" in second.results[0].message
    third = run(text, [folder / "in"], folder / "out")
    assert {r.status for r in third.results} == {"done"}
    assert first.results_digest != third.results_digest


@pytest.mark.parametrize("name", ["epochs.parquet", "epochs.csv", "passage.json", "artefact.json"])
@pytest.mark.parametrize("lost", [False, True])
def test_a_stored_table_that_was_changed_or_lost_never_gets_into_a_run(
    folder: Path, name: str, lost: bool
) -> None:
    first = run(RECIPE, [folder / "in"], folder / "out")
    finished = {row["key"] for row in rows(first.folder, "steps") if row["step"] == "export.table"}
    for path in (folder / "out" / "store" / "objects").glob(f"*/*/{name}"):
        if path.parent.name in finished:
            content = path.read_bytes()
            path.unlink() if lost else path.write_bytes(b"!" + content[1:])
    text = "# Another run, with nothing to compute.\n" + RECIPE
    second = run(text, [folder / "in"], folder / "out")
    if name == "artefact.json" and lost:  # then nothing is there, and all is made again
        assert second.computed == 3
    else:
        assert {r.status for r in second.results} == {"failed"}
        assert "stored result was changed" in second.results[0].message
        assert not list(second.folder.glob("epochs/cortex/*"))
        second = run(text, [folder / "in"], folder / "out")
    assert second.results_digest == first.results_digest


def test_a_condition_that_gives_nothing_is_warned_of(folder: Path) -> None:
    short = RECIPE.replace("length: 60 s", "length: 3 s")
    outcome = run(short, [folder / "in"], folder / "short")
    assert {r.status for r in outcome.results} == {"done_with_warnings"}
    assert "condition rest of frontal: no epoch fits in it" in outcome.results[0].message
    masked = RECIPE.replace("900 uV", "1 uV")
    outcome = run(masked, [folder / "in"], folder / "masked")
    assert "none of 29 epochs is kept" in outcome.results[0].message


def test_a_finished_run_that_was_changed_is_told_and_made_anew(folder: Path) -> None:
    first = run(RECIPE, [folder / "in"], folder / "out")
    summary = first.folder / "summary.csv"
    summary.write_text(summary.read_text().replace("p0", "p7", 1))
    second = run(RECIPE, [folder / "in"], folder / "out")
    assert not second.already
    assert second.results_digest == first.results_digest
    assert any("changed after it was finished" in note for note in second.notes)


def test_a_change_is_found_in_a_run_that_was_found_unchanged_before(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Files once checked are known by size and times; one of the same size was put in place."""
    monkeypatch.setattr(recording_digests, "UNSETTLED_S", 0.0)
    first = run(RECIPE, [folder / "in"], folder / "out")
    for _ in range(2):
        assert run(RECIPE, [folder / "in"], folder / "out").already
    table = first.folder / "epochs" / "cortex" / "p1.parquet"
    before = table.stat()
    table.write_bytes(table.read_bytes()[:-1] + b"!")
    os.utime(table, ns=(before.st_atime_ns, before.st_mtime_ns))
    second = run(RECIPE, [folder / "in"], folder / "out")
    assert not second.already
    assert second.results_digest == first.results_digest
    assert any(f"{first.folder.name} was changed" in note for note in second.notes)


def test_a_worker_is_told_of_its_own_jobs_recordings_alone(folder: Path) -> None:
    """What a job reads must not grow with the number of recordings."""
    told: dict[str, set[str]] = {}

    def look(folder: Path, workers: int, on_event: Callable[[JobEvent], None]) -> str | None:
        common = json.loads((folder / "plan.json").read_text())
        assert set(common) == {"recipe", "recipe_path", "store", "environment"}
        for path in (folder / "tasks").iterdir():
            known = json.loads(path.read_text())
            told[path.stem] = set(known["recordings"])
            assert told[path.stem] == {recording for recording, _ in known["tasks"]}
        return run_in_process(folder, workers, on_event)

    found = find_recordings([folder / "in"])
    recipe = check_recipe(WITHOUT_CONDITIONS, "recipe.yaml").recipe
    assert recipe is not None
    outcome = run_recipe(
        recipe, found, folder / "out", store_folder=None, workers=2, runner=look,
        job_length=JobLength(0.001, 0.001, 100.0),
    )  # fmt: skip
    assert {r.status for r in outcome.results} == {"done"}
    assert len(told) > 1
    assert set.union(*told.values()) == {"p0", "p1", "p2"}


def test_other_content_under_the_same_name_and_edition_is_told(folder: Path) -> None:
    run(RECIPE, [folder / "in"], folder / "out")
    second = run(RECIPE.replace("13 Hz", "12 Hz"), [folder / "in"], folder / "out")
    assert any("Raise the edition" in note for note in second.notes)
    comment = run("# only a comment\n" + RECIPE, [folder / "in"], folder / "alone")
    again = run(RECIPE, [folder / "in"], folder / "alone")
    assert not comment.notes
    assert not again.notes


def test_the_environments_of_all_results_are_in_the_folder(folder: Path) -> None:
    outcome = run(RECIPE, [folder / "in"], folder / "out")
    used = {row["environment"] for row in rows(outcome.folder, "steps")}
    assert {path.stem for path in (outcome.folder / "environments").iterdir()} == used
