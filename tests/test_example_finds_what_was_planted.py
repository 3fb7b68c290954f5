"""A run of the example finds in its tables what was planted in the recordings.

What is expected follows from ``planted.csv`` alone: band powers are the planted mean square plus
the background's, its density a/f integrated over the band: a ln(high/low).
"""

import csv
import shutil
from math import log, log10, pi
from pathlib import Path
from statistics import fmean

import pytest

from running import command, only_run, rows

COMMITTED = Path(__file__).parents[1] / "workdir_example"
CONDITIONS = ("baseline", "sedation")
BANDS_HZ = {"slow_delta": (0.5, 4.0), "alpha": (8.0, 13.0)}
QUANTITIES = {"slow_delta": "slow_power", "alpha": "alpha_power"}

#: Largest difference accepted between band powers found and planted.
TOLERANCE_DB = 0.6

Key = tuple[str, str, str, str]


def read_planted() -> dict[Key, float]:
    with (COMMITTED / "planted.csv").open(encoding="utf-8", newline="") as file:
        return {
            (row["recording"], row["signal"], row["condition"], row["quantity"]): float(
                row["value"]
            )
            for row in csv.DictReader(file)
        }


PLANTED = read_planted()
EEG = sorted({key[:2] for key in PLANTED if key[3] == "slow_power"})
RECORDINGS = sorted({key[0] for key in PLANTED})


@pytest.fixture(scope="module")
def run_folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("example") / "workdir_example"
    shutil.copytree(COMMITTED, folder, ignore=shutil.ignore_patterns("runs", "store"))
    outcome = command("run", folder)
    assert outcome.returncode == 0, outcome.stdout + outcome.stderr
    return only_run(folder)


def about(
    table: list[dict[str, str]], recording: str, signal: str, condition: str
) -> list[dict[str, str]]:
    """Return a table's rows about one signal in one condition."""
    named = {"recording": recording, "signal": signal, "condition": condition}
    return [row for row in table if named.items() <= row.items()]


def expected_power(recording: str, signal: str, condition: str, band: str) -> float:
    """Return what a band holds: the waves planted there, and the background behind them."""
    here = (recording, signal, condition)
    low_hz, high_hz = BANDS_HZ[band]
    background = PLANTED[(*here, "background_density_at_1_hz")] * log(high_hz / low_hz)
    return PLANTED[(*here, QUANTITIES[band])] + background


def kept(table: list[dict[str, str]]) -> list[dict[str, str]]:
    return [row for row in table if row["kept"] == "true"]


def test_every_recording_is_done(run_folder: Path) -> None:
    table = rows(run_folder, "recordings")
    assert [row["recording"] for row in table] == RECORDINGS
    assert {row["status"] for row in table} <= {"done", "done_with_warnings"}


@pytest.mark.parametrize(("recording", "signal"), EEG)
@pytest.mark.parametrize("band", BANDS_HZ)
def test_the_change_of_band_power_between_conditions(
    run_folder: Path, recording: str, signal: str, band: str
) -> None:
    """Over 90 s noise 1 Hz wide varies by some 0.4 dB; the planted mean squares vary by nothing.

    What is left are the tapers, which weigh an epoch's middle, and time lost beside a gap.
    """
    table = rows(run_folder, "averages/cortex")
    found, expected = [], []
    for condition in CONDITIONS:
        (row,) = about(table, recording, signal, condition)
        found.append(float(row[f"power.{band}"]))
        expected.append(expected_power(recording, signal, condition, band))
    change_db = 10 * log10(found[1] / found[0])
    assert change_db == pytest.approx(10 * log10(expected[1] / expected[0]), abs=TOLERANCE_DB)


@pytest.mark.parametrize(("recording", "signal"), EEG)
@pytest.mark.parametrize("condition", CONDITIONS)
def test_alpha_power_and_peak(
    run_folder: Path, recording: str, signal: str, condition: str
) -> None:
    """Alpha waves lie inside their band and the filter's, so their power itself is found."""
    (row,) = about(rows(run_folder, "averages/cortex"), recording, signal, condition)
    expected = expected_power(recording, signal, condition, "alpha")
    assert 10 * log10(float(row["power.alpha"]) / expected) == pytest.approx(0, abs=TOLERANCE_DB)
    peak_hz = PLANTED[recording, signal, condition, "alpha_peak"]
    assert float(row["alpha_peak.frequency"]) == pytest.approx(peak_hz, abs=0.4)


@pytest.mark.parametrize(("recording", "signal"), EEG)
def test_levels_of_epochs_rise_as_the_averages_do(
    run_folder: Path, recording: str, signal: str
) -> None:
    """A mean of decibels lies below the decibels of a mean by as much in either condition."""
    table = kept(rows(run_folder, "epochs/cortex"))
    for band in BANDS_HZ:
        means = [
            fmean(float(row[f"level.{band}"]) for row in about(table, recording, signal, condition))
            for condition in CONDITIONS
        ]
        expected = [expected_power(recording, signal, c, band) for c in CONDITIONS]
        assert means[1] - means[0] == pytest.approx(10 * log10(expected[1] / expected[0]), abs=1.0)


@pytest.mark.parametrize("recording", RECORDINGS)
@pytest.mark.parametrize("condition", CONDITIONS)
def test_the_pulse_and_its_harmonics(run_folder: Path, recording: str, condition: str) -> None:
    """A pulse's fundamental is its rate over 60 (common practice, no source).

    Parts of a breath in an epoch move its mean by A / (pi f T) at the most.
    """
    table = about(kept(rows(run_folder, "epochs/pulse")), recording, "artery", condition)
    assert len(table) >= 3
    here = (recording, "artery", condition)
    breaths = PLANTED[(*here, "ventilator_rate")] / 60 * 20
    moved = PLANTED[(*here, "ventilator_amplitude")] / (pi * breaths) + 0.02
    for row in table:
        beats_per_min = 60 * float(row["harmonics.fundamental"])
        assert beats_per_min == pytest.approx(PLANTED[(*here, "pulse_rate")], abs=0.02)
        mean = float(row["harmonics.mean"])
        assert mean == pytest.approx(PLANTED[(*here, "mean_pressure")], abs=moved)
        for k in range(1, 7):
            amplitude = float(row[f"harmonics.amplitude_{k}"])
            assert amplitude == pytest.approx(PLANTED[(*here, f"amplitude_{k}")], abs=0.05)
        for k in range(2, 7):
            phase = float(row[f"harmonics.phase_{k}"])
            away = (phase - PLANTED[(*here, f"phase_{k}")] + 180) % 360 - 180
            assert abs(away) < 5


@pytest.mark.parametrize("recording", RECORDINGS)
@pytest.mark.parametrize("condition", CONDITIONS)
def test_three_harmonics_rebuild_the_wave(run_folder: Path, recording: str, condition: str) -> None:
    """From the planted amplitudes: the fewest whose squares reach 95 % of the sum of squares."""
    here = (recording, "artery", condition)
    squares = [PLANTED[(*here, f"amplitude_{k}")] ** 2 for k in range(1, 7)]
    needed = next(n for n in range(1, 7) if sum(squares[:n]) >= 0.95 * sum(squares))
    table = about(kept(rows(run_folder, "epochs/pulse")), recording, "artery", condition)
    assert {float(row["harmonics.needed"]) for row in table} == {needed}


@pytest.mark.parametrize("recording", RECORDINGS)
@pytest.mark.parametrize("condition", CONDITIONS)
def test_the_ventilator_shows_near_its_rate(
    run_folder: Path, recording: str, condition: str
) -> None:
    """Mechanical ventilation is a small peak near 0.2 Hz (common practice, no source)."""
    table = about(kept(rows(run_folder, "epochs/pulse")), recording, "artery", condition)
    rate_hz = PLANTED[recording, "artery", condition, "ventilator_rate"] / 60
    for row in table:
        assert float(row["ventilator.frequency"]) == pytest.approx(rate_hz, abs=0.005)
        assert float(row["ventilator.prominence"]) > 20


def test_nothing_is_joined_across_the_gap(run_folder: Path) -> None:
    recording = next(key[0] for key in PLANTED if key[3] == "gap_start")
    first = PLANTED[recording, "", "", "gap_start"]
    last = PLANTED[recording, "", "", "gap_stop"]
    for chain in ("cortex", "pulse"):
        spans = [
            (float(row["start_s"]), float(row["start_s"]) + float(row["duration_s"]))
            for row in rows(run_folder, f"epochs/{chain}")
            if row["recording"] == recording and row["condition"] == "sedation"
        ]
        assert all(stop <= first or start >= last for start, stop in spans)
        assert any(stop <= first for _, stop in spans)
        assert any(start >= last for start, _ in spans)
    gaps = [
        (row["recording"], float(row["excluded_s"]))
        for row in rows(run_folder, "excluded")
        if row["reason"] == "gap"
    ]
    assert set(gaps) == {(recording, last - first)}


def test_the_electrode_that_was_off_is_left_out_on_its_side_alone(run_folder: Path) -> None:
    recording = next(key[0] for key in PLANTED if key[3] == "flat_start")
    flat_s, mains_s = (
        [PLANTED[recording, "frontal_right", "", f"{what}_{edge}"] for edge in ("start", "stop")]
        for what in ("flat", "mains")
    )
    table = [row for row in rows(run_folder, "epochs/cortex") if row["recording"] == recording]
    for row in table:
        start = float(row["start_s"])
        stop = start + float(row["duration_s"])
        hit = [
            start < span[1] and stop > span[0] and row["signal"] == "frontal_right"
            for span in (flat_s, mains_s)
        ]
        if any(hit):
            assert row["kept"] == "false"
            assert set(row["reason"].split("; ")) <= {"flatline", "amplitude"}
        elif row["signal"] == "frontal_left":
            assert row["kept"] == "true"
    excluded = {
        (row["signal"], row["reason"]): float(row["excluded_s"])
        for row in rows(run_folder, "excluded")
        if (row["recording"], row["chain"], row["condition"]) == (recording, "cortex", "sedation")
    }
    assert excluded["frontal_right", "flatline"] >= flat_s[1] - flat_s[0]
    assert excluded["frontal_right", "amplitude"] >= mains_s[1] - mains_s[0]
    assert excluded["frontal_left", "any"] == 0


def test_the_damaged_recording_fails_by_name_and_the_others_go_on(tmp_path: Path) -> None:
    sound = COMMITTED / "recordings" / "harbour" / "v01.edf"
    damaged = COMMITTED / "damaged" / "v07.edf"
    outcome = command("run", COMMITTED / "recipe.yaml", sound, damaged, "--into", tmp_path)
    assert outcome.returncode == 3
    assert "v07" in outcome.stdout + outcome.stderr
    assert "Traceback" not in outcome.stdout + outcome.stderr
    status = {row["recording"]: row for row in rows(only_run(tmp_path), "recordings")}
    assert status["v01"]["status"] == "done"
    assert status["v07"]["status"] == "failed"
    assert "records" in status["v07"]["message"]
