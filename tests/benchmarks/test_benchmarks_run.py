"""The benchmarks measure what they say. What they find is not for tests: machines differ."""

import csv
import os
import sys
import threading
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchmarks import plain_chain, plain_script, reader, second_run
from benchmarks.measured import Spread, Timed, child, command, ratios, timed

LENGTH_S = 1500  # three stretches, so that what lies across their borders is compared too


@pytest.fixture(scope="module")
def chain(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path]:
    """Return a recording, and where the recipe was run over it."""
    folder = tmp_path_factory.mktemp("chain")
    recording = plain_chain.write(folder / "long.edf", LENGTH_S)
    plain_chain.run(recording, folder / "into")
    return recording, folder / "into"


def test_recipe_and_plain_script_agree(chain: tuple[Path, Path]) -> None:
    recording, into = chain
    apart, compared = plain_chain.difference(into, recording)
    assert apart <= plain_chain.TOLERANCE
    assert compared > 3 * 0.9 * LENGTH_S / plain_script.STEP_S


def test_what_is_compared_has_masks_and_edges(chain: tuple[Path, Path]) -> None:
    """The artefact at 90 s and both ends are not kept; most of the rest is."""
    found = plain_script.features_of_file(chain[0])
    lost_s = found.start_s[~found.kept]
    assert {0.0, float(LENGTH_S - plain_script.EPOCH_S)} <= set(lost_s)
    assert np.any((lost_s > 80) & (lost_s < 100))
    assert np.mean(found.kept) > 0.9


def test_plain_script_pads_as_the_run_states(chain: tuple[Path, Path]) -> None:
    """Both start their filter from the same padding: the 1 % response in the run's table."""
    (table,) = chain[1].glob("runs/*/derived.csv")
    with table.open(encoding="utf-8", newline="") as file:
        stated = {row["quantity"]: row["value"] for row in csv.DictReader(file)}
    noise = np.random.default_rng(1).standard_normal(20 * plain_chain.RATE_HZ)
    _, ringing = plain_script.band_passed(noise, plain_chain.RATE_HZ)
    assert ringing / plain_chain.RATE_HZ == float(stated["response above 1 %"])


def test_difference_finds_a_difference(
    chain: tuple[Path, Path], monkeypatch: pytest.MonkeyPatch
) -> None:
    recording, into = chain
    monkeypatch.setattr(plain_script, "EDGE_SHARE", 0.95 * (1 + 1e-6))
    assert plain_chain.difference(into, recording)[0] > plain_chain.TOLERANCE


def test_difference_refuses_other_epochs(
    chain: tuple[Path, Path], monkeypatch: pytest.MonkeyPatch
) -> None:
    recording, into = chain
    monkeypatch.setattr(plain_script, "RANGE_UV", 1e6)
    with pytest.raises(AssertionError, match="other epochs are kept"):
        plain_chain.difference(into, recording)


def test_reader_is_measured_on_files_of_the_size_stated() -> None:
    found = reader.measure(hours=10 / 3600, rounds=2)
    header = 256 * (reader.SIGNALS + 1)
    for kind, width in (("EDF", 2), ("BDF", 3)):
        size = header + reader.SIGNALS * reader.RATE_HZ * 10 * width
        assert found[kind]["size_mb"] == size / 1e6
        for name in ("plain_s", "decode_all_ratio", "decode_two_ratio"):
            spread = found[kind][name]
            assert 0 < spread.low <= spread.median <= spread.high, (kind, name)
        growth = found[kind]["memory_growth_mb"]
        assert 0 <= growth.low <= growth.high < reader.MEMORY_TARGET_MB


def test_a_process_is_timed_with_those_it_starts() -> None:
    nested = "import subprocess, sys; subprocess.run([sys.executable, '-c', sys.argv[1]])"
    busy = "import time\nx = bytearray(200_000_000)\nwhile time.process_time() < 0.2: pass"
    found = timed([sys.executable, "-c", nested, busy])
    assert found.cpu_s >= 0.2
    assert found.wall_s >= 0.2
    assert found.peak_mb >= 200


def test_a_process_that_fails_is_no_measurement() -> None:
    with pytest.raises(RuntimeError, match="no such module"):
        timed([sys.executable, "-c", "raise SystemExit('no such module')"])
    with pytest.raises(RuntimeError, match="No module named"):
        child("not_there")


@given(st.lists(st.floats(1e-6, 1e6), min_size=1))
def test_spread_is_least_middle_most(values: list[float]) -> None:
    spread = Spread.of(values)
    assert (spread.low, spread.high) == (min(values), max(values))
    assert sum(v <= spread.median for v in values) >= len(values) / 2
    assert sum(v >= spread.median for v in values) >= len(values) / 2


def test_ratios_are_taken_within_a_round() -> None:
    """A machine that is slower by the same factor for both sides changes no ratio."""
    assert ratios([2.0, 20.0, 6.0], [1.0, 10.0, 3.0]) == Spread(2.0, 2.0, 2.0)
    with pytest.raises(ValueError, match="shorter"):
        ratios([1.0, 2.0], [1.0])


def test_tasks_done_reads_what_a_run_prints() -> None:
    told = "1,203 tasks computed, 600 taken from the store (reading 0.1 s, ...)."
    assert second_run.tasks_done(Timed(1.0, 1.0, 1.0, told)) == 1203
    with pytest.raises(RuntimeError, match="does not say"):
        second_run.tasks_done(Timed(1.0, 1.0, 1.0, "Nothing to compute"))


@pytest.mark.skipif(not Path("/proc/self/status").exists(), reason="the system has no /proc")
def test_a_run_is_timed_with_its_workers(tmp_path: Path) -> None:
    """The largest process of a run is a worker of its backend, a grandchild's child."""
    recording = plain_chain.write(tmp_path / "long.edf", LENGTH_S)
    (tmp_path / "recipe.yaml").write_text(plain_chain.RECIPE, encoding="utf-8")
    seen_mb: dict[int, float] = {}
    ended = threading.Event()

    def watch() -> None:
        while not ended.wait(0.02):
            for process in _below(os.getpid()):
                seen_mb[process] = max(_peak_mb(process), seen_mb.get(process, 0.0))

    watcher = threading.Thread(target=watch)
    watcher.start()
    try:
        into = ("--into", tmp_path / "into", "--workers", 1)
        found = command("run", tmp_path / "recipe.yaml", recording, *into)
    finally:
        ended.set()
        watcher.join()
    assert len(seen_mb) >= 3, "the command, Snakemake and a worker"
    assert found.peak_mb >= 0.99 * max(seen_mb.values())


def _below(process: int) -> list[int]:
    """Return the processes that a process has started, and those that they have."""
    try:
        tasks = Path(f"/proc/{process}/task").iterdir()
        children = [int(n) for task in tasks for n in (task / "children").read_text().split()]
    except OSError:  # it has ended
        return []
    return [below for child in children for below in (child, *_below(child))]


def _peak_mb(process: int) -> float:
    try:
        lines = Path(f"/proc/{process}/status").read_text().splitlines()
    except OSError:
        return 0.0
    return sum(int(line.split()[1]) for line in lines if line.startswith("VmHWM:")) * 1024 / 1e6
