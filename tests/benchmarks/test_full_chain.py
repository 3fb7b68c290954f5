"""The whole chain's benchmark compares ways that do the same job, and says so when they do not."""

import time
from dataclasses import replace
from datetime import datetime
from fractions import Fraction
from pathlib import Path

import numpy as np
import pytest

from benchmarks import (
    full_bound,
    full_chain,
    full_check,
    full_data,
    full_long,
    full_recipe,
    full_sizes,
    full_stages,
)
from benchmarks.full_check import DifferentJobError, Epochs, require_same_job
from benchmarks.made_up import findings
from benchmarks.measured import Spread, Timed
from waveassay.recipe import check_recipe
from waveassay.recording import open_recording

CHANNELS, LENGTH_S = 2, 300


@pytest.fixture(scope="module")
def both(tmp_path_factory: pytest.TempPathFactory) -> tuple[Epochs, Epochs, Epochs]:
    """Return what a run, the script on whole arrays and the loop find in a recording."""
    pytest.importorskip("pyedflib", reason="it has no wheel here, and the scripts read with it")
    folder = tmp_path_factory.mktemp("chain")
    recording = full_data.write(folder / "few.edf", CHANNELS, LENGTH_S)
    full_chain.run(recording, folder, full_recipe.DEFAULT)
    for way in full_chain.SCRIPT_TARGETS:
        full_chain.script(way, recording, folder)
    ours = full_check.ours(folder / "into")
    scripts = [full_check.scripts(folder / f"{way}.csv") for way in full_chain.SCRIPT_TARGETS]
    return ours, scripts[0], scripts[1]


Both = tuple[Epochs, Epochs, Epochs]


def test_run_and_scripts_do_the_same_job(both: Both) -> None:
    ours, vectorised, loop = both
    assert ours.kept.shape == (CHANNELS, (LENGTH_S - 4) // 2 + 1)
    assert 0.5 < np.mean(ours.kept) < 1
    for script in (vectorised, loop):
        assert require_same_job(ours, script) <= full_check.TOLERANCE


def test_loop_and_whole_arrays_find_the_same_numbers(both: Both) -> None:
    _, vectorised, loop = both
    assert np.array_equal(vectorised.kept, loop.kept)
    for name, values in vectorised.columns.items():
        np.testing.assert_allclose(loop.columns[name], values, rtol=1e-9, err_msg=name)


def test_another_job_is_told(both: Both) -> None:
    ours, script, _ = both
    power = script.columns["band_power.alpha"] * (1 + 2 * full_check.TOLERANCE)
    other = replace(script, columns={**script.columns, "band_power.alpha": power})
    with pytest.raises(DifferentJobError, match=r"band_power\.alpha of the run"):
        require_same_job(ours, other)
    with pytest.raises(DifferentJobError, match="kept by the run or by the script alone"):
        require_same_job(ours, replace(script, kept=np.zeros_like(script.kept)))
    with pytest.raises(DifferentJobError, match="other epochs"):
        require_same_job(ours, replace(script, start_s=script.start_s + 2))
    with pytest.raises(DifferentJobError, match="other columns"):
        require_same_job(ours, replace(script, columns={"band_power.alpha": power}))


def test_a_number_that_is_missing_is_told(both: Both) -> None:
    ours, script, _ = both
    nothing = np.full_like(script.columns["share.beta"], np.nan)
    other = replace(script, columns={**script.columns, "share.beta": nothing})
    with pytest.raises(DifferentJobError, match=r"share\.beta"):
        require_same_job(ours, other)


@pytest.mark.parametrize("precision", full_recipe.PRECISIONS)
def test_spectra_agree_with_the_textbook(precision: str) -> None:
    pytest.importorskip("pyedflib", reason="it has no wheel here, and the textbook reads with it")
    errors = full_check.psd_errors(precision, channels=1, length_s=LENGTH_S)
    allowed = 1e-8 if precision == "double" else full_check.PSD_TARGETS["acceptable"]
    assert 0 < max(errors.values()) < allowed


@pytest.mark.parametrize("precision", full_recipe.PRECISIONS)
def test_recipes_are_sound(precision: str) -> None:
    for text in (full_recipe.chain(precision), full_recipe.spectra(precision)):
        assert check_recipe(text, "recipe.yaml").recipe is not None


def test_recordings_are_as_long_as_asked_and_the_same_each_time(tmp_path: Path) -> None:
    length_s = full_data.TILE_S + 7
    one = full_data.write(tmp_path / "one.edf", CHANNELS, length_s)
    two = full_data.write(tmp_path / "two.edf", CHANNELS, length_s)
    assert one.read_bytes() == two.read_bytes()
    header = 256 * (CHANNELS + 1)
    samples = one.stat().st_size - header
    assert samples == round(1e6 * full_data.size_mb(CHANNELS, length_s))
    with open_recording(one) as recording:
        (piece,) = recording.facts.pieces
        assert piece.length_s == length_s
        assert recording.facts.start == datetime(2031, 4, 5, 9, 30)
        assert [s.label for s in recording.facts.signals] == ["CH00", "CH01"]
        first, again = (
            recording.read([1], 0, Fraction(at), Fraction(at + 5))[0]
            for at in (0, full_data.TILE_S)
        )
    assert np.array_equal(first, again)
    assert not list(tmp_path.glob("tmp*"))


def test_bound_counts_the_transforms_that_must_be_done(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = full_data.write(tmp_path / "one.edf", 1, 10)
    counted: list[tuple[int, int]] = []

    def transform(rows: int, length: int, dtype: type) -> float:
        counted.append((rows, length))
        return 0.0

    monkeypatch.setattr(full_bound, "_transform", transform)
    found = full_bound.bound(path, 1, 10, "double")
    # 10 s: nine segments of 2 s that overlap by half; four epochs of 4 s, by five tapers.
    assert counted == [(9, 256), (4 * 5, 512)]
    assert set(found) == set(full_bound.STAGES)


def test_bound_is_of_every_precision_measured(tmp_path: Path) -> None:
    path = full_data.write(tmp_path / "one.edf", 1, 60)
    found = full_bound.bounds(path, 1, 60)
    assert set(full_recipe.PRECISIONS) <= set(found)
    assert all(sum(stages.values()) > 0 for stages in found.values())


def test_ratios_leave_out_the_start() -> None:
    def timed(cpu_s: float, wall_s: float) -> list[Timed]:
        return [Timed(wall_s, cpu_s, 1.0, "")]

    bounds = "{" + ", ".join(f'"{p}": {_stages()}' for p in full_bound.PRECISIONS) + "}"
    found = {
        **{f"ours {p}": timed(8.0, 6.0) for p in full_recipe.PRECISIONS},
        **{f"start {p}": timed(2.0, 1.5) for p in full_recipe.PRECISIONS},
        "as given": timed(9.0, 5.0),
        "vectorised": timed(40.0, 42.0),
        "loop": timed(50.0, 60.0),
        "bound": [Timed(9.0, 9.0, 1.0, bounds)],
    }
    said = full_chain.summary(found)
    for precision in full_recipe.PRECISIONS:
        assert said["over_bound"][precision] == Spread.of([(8 - 2) / len(full_bound.STAGES)])
    one_worker = {"vectorised": Spread.of([7]), "loop": Spread.of([10])}
    assert said["times_faster_one_worker"] == one_worker
    assert said["times_faster"] == {"vectorised": Spread.of([42 / 5]), "loop": Spread.of([12])}


def _stages() -> str:
    return "{" + ", ".join(f'"{stage}": 1.0' for stage in full_bound.STAGES) + "}"


def test_a_clock_counts_what_is_called_once() -> None:
    clock = full_stages.Clock()
    inner = clock.clocked(_busy, lambda *_: "inner")

    def both() -> None:
        _busy(0.02)
        inner(0.05)

    clock.clocked(both, lambda *_: "outer")()
    assert 0.02 <= clock.seconds["outer"] < 0.05 <= clock.seconds["inner"]


def _busy(cpu_s: float) -> None:
    start = time.process_time()
    while time.process_time() - start < cpu_s:
        pass


def test_every_part_has_its_share_of_a_run() -> None:
    """A part without a share was renamed in the engine, and would hide in the rest."""
    found = full_stages.measure(1, 120, rounds=1)
    assert sum(spread.median for spread in found.values()) == pytest.approx(1)
    assert all(spread.median > 0 for spread in found.values()), found


def test_a_length_without_room_is_halved(monkeypatch: pytest.MonkeyPatch) -> None:
    asked: list[float] = []

    def room_for(folder: Path, needed_mb: float) -> bool:
        asked.append(needed_mb)
        return len(asked) > 5

    def run(recording: Path, folder: Path, precision: str, workers: int) -> Timed:
        length_s = recording.stat().st_size / 1e6 / full_data.size_mb(1, 1)
        return Timed(length_s / workers, length_s, 100.0 * workers, "")

    bound = Timed(1.0, 1.0, 1.0, f'{{"{full_recipe.DEFAULT}": {_stages()}}}')
    monkeypatch.setattr(full_data, "room_for", room_for)
    monkeypatch.setattr(full_chain, "run", run)
    monkeypatch.setattr(full_long, "child", lambda *_: bound)
    (found,) = full_long.measure({1: 1}, channels=1)
    assert (found["asked_hours"], found["hours"]) == (1, 1 / 32)
    assert asked[0] == 32 * asked[-1] > full_data.size_mb(1, 3600)
    assert found["wall_s"]["1"].median == pytest.approx(3600 / 32, rel=0.01)
    assert found["speed_up"] == Spread.of([2.0])
    assert found["bound_s"] == Spread.of([len(full_bound.STAGES)])
    assert found["over_bound"].median == pytest.approx(3600 / 32 / len(full_bound.STAGES), rel=0.01)


def test_points_of_the_figure_are_in_order_of_size() -> None:
    points = full_sizes.points(findings())
    assert len(points["ours"]) == len(points["bound"]) == 2 + 1 + 2
    assert len(points["vectorised"]) == 2 + 1
    for known in points.values():
        assert known == sorted(known)
    assert points["ours"][-1][0] == pytest.approx(24 * 3600 * 64 * 512 / 1e6)
