"""Run fused and by stretches, a chain gives what its steps' own functions give of whole pieces."""

from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from chains import borders_s, piece_of, program_of, run_by_form, run_in_stretches, run_plainly
from running import rows, run, write_eeg
from waveassay.contract import Interval, Signal, SignalError
from waveassay.execute import overlap_save
from waveassay.execute.fused import run_unit
from waveassay.plan import fusing
from waveassay.plan.program import Program
from waveassay.plan.windows import Form
from waveassay.recipe import RecipeError

#: Samples may differ by this share of the input's rms. Measured: up to 5e-9, most below 1e-9.
TOLERANCE = 1e-8

BAND = "filter.butterworth: {high_pass: 0.5 Hz, low_pass: 40 Hz}"
NOTCH = "filter.notch: {line: 50 Hz}"
DOWN = "resample: {rate: 128 Hz}"
FORWARD = "filter.butterworth: {high_pass: 1 Hz, order_per_pass: 2, passes: forward}"
SLOW = "filter.butterworth: {high_pass: 300 mHz, order_per_pass: 1, widen: 20 s}"
AMPLITUDE = "exclude.amplitude: {range: 300 uV, window: 1 s}"
STEPS = (
    BAND,
    NOTCH,
    DOWN,
    AMPLITUDE,
    FORWARD,
    "filter.butterworth: {low_pass: 30 Hz, order_per_pass: 3, edges: even}",
    SLOW,
    "filter.notch: {line: 30 Hz, width: 1 Hz, passes: forward}",
    "resample: {rate: 100 Hz, edges: zero}",
    "resample: {rate: 200 Hz, attenuation: 60 dB}",
    "exclude.flatline: {at_least: 5 s}",
)
RATES = ("128", "200", "249.98", "256", "500", "512")


def compiled(steps: list[str], rate: str) -> Program:
    """Return a chain's program; rates that are odd are called by the round one near."""
    if rate == "249.98":
        changed = [n for n, step in enumerate(steps) if step.startswith("resample")]
        if changed:
            first = changed[0]
            named = steps[first].replace("}", ", nominal_rate: 250 Hz}")
            steps = [*steps[:first], named, *steps[first + 1 :]]
    return program_of(steps, rate)


def check_same(made: Signal, expected: Signal, scale: float) -> None:
    assert made.x.size == expected.x.size
    assert made.rate_hz == expected.rate_hz
    assert made.start_s == expected.start_s
    assert made.excluded == expected.excluded
    assert float(np.max(np.abs(made.x - expected.x))) <= TOLERANCE * scale


@settings(max_examples=30, deadline=None)
@given(
    st.lists(st.sampled_from(STEPS), min_size=1, max_size=4),
    st.sampled_from(RATES),
    st.integers(30, 700),
    st.fractions(20, 700, max_denominator=7),
)
def test_any_chain_by_stretches_is_the_chain_run_whole(
    steps: list[str], rate: str, length_s: int, stretch_s: Fraction
) -> None:
    try:
        program = compiled(steps, rate)
    except RecipeError:
        assume(False)
    assume(all(move.spec_out is not None for move in program.moves.values()))
    signal = piece_of(rate, length_s)
    try:
        expected = run_plainly(program, signal)
    except SignalError:
        assume(False)  # a cut-off above what a resampling before it left
    check_same(run_in_stretches(program, signal, stretch_s), expected, float(np.std(signal.x)))


@settings(max_examples=12, deadline=None)
@given(
    st.sampled_from((20, 50, 100, 200)),
    st.integers(1, 3),
    st.sampled_from(([], [NOTCH], ["resample: {rate: 100 Hz}"], [AMPLITUDE])),
    st.sampled_from(("128", "200")),
    st.integers(20, 3000),
    st.integers(100, 700),
)
def test_low_cut_offs_too_in_pieces_of_any_length(
    cutoff_mhz: int, order: int, more: list[str], rate: str, length_s: int, stretch_s: int
) -> None:
    """From pieces shorter than the response to those of several blocks."""
    slow = f"filter.butterworth: {{high_pass: {cutoff_mhz} mHz, order_per_pass: {order}}}"
    program = program_of([slow, *more], rate)
    signal = piece_of(rate, length_s)
    made = run_in_stretches(program, signal, Fraction(stretch_s))
    check_same(made, run_plainly(program, signal), float(np.std(signal.x)))


@pytest.mark.parametrize(
    ("steps", "rate", "length_s"),
    [
        ([BAND, NOTCH, DOWN], "512", 1500),
        ([BAND, DOWN, NOTCH], "500", 900),
        ([BAND, DOWN], "249.98", 1300),
        (["resample: {rate: 512 Hz}", NOTCH, "resample: {rate: 100 Hz}"], "128", 700),
        ([BAND.replace("}", ", passes: forward}"), DOWN], "256", 700),
        # Through the last two alone an end is felt for longer than through all four.
        ([FORWARD, FORWARD, SLOW, SLOW], "256", 93),
        (["filter.butterworth: {high_pass: 0.1 Hz}", DOWN], "512", 1900),
        (["filter.butterworth: {high_pass: 0.02 Hz}", DOWN], "256", 4000),
        (["filter.butterworth: {high_pass: 0.1 Hz}", DOWN], "250", 1300),
    ],
)
def test_fused_is_the_chain_run_whole(steps: list[str], rate: str, length_s: int) -> None:
    """Pieces long enough to have a middle, where the response alone is at work."""
    program = compiled(steps, rate)
    (unit,) = Form(program, 0).units
    assert unit.fused
    assert len(unit.moves) == len(steps)
    signal = piece_of(rate, length_s)
    made = run_in_stretches(program, signal, Fraction(600))
    check_same(made, run_plainly(program, signal), float(np.std(signal.x)))


@pytest.mark.parametrize(
    ("cutoff", "rate", "length_s"),
    [
        ("0.5", "256", 1000),
        ("0.5", "249.98", 1000),
        ("0.5", "500", 1000),
        ("0.1", "250", 1300),
        ("0.02", "256", 2900),
    ],
)
def test_what_is_kept_has_the_same_bytes_whatever_the_stretches(
    cutoff: str, rate: str, length_s: int
) -> None:
    program = compiled([BAND.replace("0.5 Hz", f"{cutoff} Hz"), DOWN], rate)
    (unit,) = Form(program, 0).units
    assert unit.fused
    signal = piece_of(rate, length_s)
    whole = run_in_stretches(program, signal, Fraction(100_000))
    for stretch_s in (Fraction(600), Fraction(149), Fraction(333, 7)):
        made = run_in_stretches(program, signal, stretch_s)
        assert made.x.tobytes() == whole.x.tobytes()
        assert made.excluded == whole.excluded


def test_what_is_kept_has_the_same_bytes_whatever_follows() -> None:
    """A later step with a longer window has more read, and changes no byte of what came before."""
    signal = piece_of("256", 1300)
    made = []
    for window in ("1 s", "2.5 s", "9 s"):
        steps = [BAND, DOWN, AMPLITUDE.replace("1 s", window)]
        made.append(run_in_stretches(program_of(steps, 256), signal, Fraction(600)).x.tobytes())
    assert made[0] == made[1] == made[2]


def test_more_on_either_side_changes_no_byte() -> None:
    program = program_of([BAND, DOWN], 512)
    signal = piece_of("512", 1900)
    borders = borders_s(signal.piece, program, Fraction(600))
    form = Form(program, 0)
    alone = run_by_form(form, signal, borders[1], borders[2])
    (unit,) = form.units
    own = form.own(signal.piece, borders[1], borders[2])
    assert run_unit(unit, signal, form.step_s, own, own).x.tobytes() == alone.x.tobytes()


def test_the_ends_of_a_piece_are_those_of_the_functions() -> None:
    """There the functions themselves are run, so that only rounding is left."""
    program = program_of([BAND, DOWN], 512)
    signal = piece_of("512", 700)
    made, expected = run_in_stretches(program, signal, Fraction(600)), run_plainly(program, signal)
    for end in (slice(0, 5 * 128), slice(-5 * 128, None)):
        apart = float(np.max(np.abs(made.x[end] - expected.x[end])))
        assert apart < 1e-12 * float(np.max(np.abs(signal.x)))


def test_a_short_piece_is_run_by_the_functions_to_the_bit() -> None:
    program = program_of([BAND, NOTCH, DOWN], 512)
    signal = piece_of("512", 60)
    made = run_in_stretches(program, signal, Fraction(600))
    assert np.array_equal(made.x, run_plainly(program, signal).x)


def test_a_sample_that_is_no_number_is_told_by_the_step_that_meets_it() -> None:
    program = program_of([BAND, DOWN], 256)
    signal = piece_of("256", 400)
    x = signal.x.copy()
    x[50_000] = np.nan
    with pytest.raises(SignalError, match=r"filter\.butterworth: signal frontal has 1 sample"):
        run_in_stretches(program, signal.with_samples(x), Fraction(600))


@pytest.mark.parametrize("high_pass", ["0.5 Hz", "0.1 Hz, order_per_pass: 1"])
def test_a_run_with_a_gap_is_the_same_fused_and_not(
    high_pass: str, tmp_path_factory: pytest.TempPathFactory, monkeypatch: pytest.MonkeyPatch
) -> None:
    folder = tmp_path_factory.mktemp("fused")
    recipe = """\
recipe: fused
edition: 1
precision: double
title: Fused and not
purpose: To compare
signals:
  frontal: {labels: ["EEG Fp1-F7"], unit: uV, modality: eeg}
chains:
  cortex:
    - load: {signals: [frontal]}
    - filter.butterworth: {high_pass: 0.5 Hz, low_pass: 40 Hz}
    - filter.notch: {line: 50 Hz}
    - resample: {rate: 128 Hz}
    - exclude.amplitude: {range: 900 uV, window: 1 s}
    - epoch.consecutive: {length: 4 s}
    - spectrum.periodogram: {}
    - feature.band_power: {bands: {alpha: [8 Hz, 13 Hz]}, express: absolute}
    - export.table: {}
"""
    x = 30 * np.random.default_rng(3).standard_normal(500 * 256)
    x[300 * 256 : 301 * 256] += 2000
    pieces = [Interval(Fraction(0), Fraction(290)), Interval(Fraction(300), Fraction(510))]
    recipe = recipe.replace("high_pass: 0.5 Hz", f"high_pass: {high_pass}")
    path = write_eeg(folder / "gap.edf", x, 256, pieces=pieces)
    fused = run(recipe, [path], folder / "out")
    monkeypatch.setattr(fusing, "why_not", lambda moves, reach, step_s: "not now")
    plain = run(recipe, [path], folder / "plain")
    keys = [
        {row["step"]: row["key"] for row in rows(outcome.folder, "steps")}
        for outcome in (fused, plain)
    ]
    assert keys[0]["filter.notch"] != keys[1]["filter.notch"]  # the form of execution is in it
    one, other = (rows(outcome.folder, "epochs/cortex") for outcome in (fused, plain))
    assert len(one) == len(other) > 100
    for a, b in zip(one, other, strict=True):
        powers = [float(row.pop("band_power.alpha") or "nan") for row in (a, b)]
        assert a == b
        assert powers[0] == pytest.approx(powers[1], rel=1e-7, nan_ok=True)


ratios = st.tuples(st.integers(1, 7), st.integers(1, 7)).map(lambda pair: Fraction(*pair))


@given(ratios, st.integers(1, 4), st.booleans(), st.booleans(), st.integers(0, 1000))
def test_a_fold_is_zeros_between_a_gain_and_every_dth_sample(
    ratio: Fraction, size: int, turns_before: bool, turns_between: bool, seed: int
) -> None:
    rng = np.random.default_rng(seed)
    up, down = ratio.numerator, ratio.denominator
    n = 2 * size * down

    def gain(length: int, turns: bool) -> np.ndarray:
        return np.fft.rfft(rng.standard_normal(length)) if turns else rng.random(length // 2 + 1)

    before, between = gain(n, turns_before), gain(n * up, turns_between)
    after = gain(n * up // down, turns_before)
    fold = overlap_save.fold_of(n, ratio, before, between, after)
    blocks = rng.standard_normal((3, n))
    x = np.fft.irfft(np.fft.rfft(blocks) * before, n)
    spread = np.zeros((3, n * up))
    spread[:, ::up] = x * up
    kept = np.fft.irfft(np.fft.rfft(spread) * between, n * up)[:, ::down]
    expected = np.fft.irfft(np.fft.rfft(kept) * after, n * up // down)
    made = overlap_save.apply(blocks, fold)
    scale = float(np.max(np.abs(expected)))
    # What is taken in single precision is right to 3e-7 of a gain of 1e-4, in each of D parts.
    assert made == pytest.approx(expected, abs=1e-12 * max(1.0, scale) + 3e-11 * down * size)
    alone = [overlap_save.apply(blocks[k : k + 1], fold) for k in range(3)]
    assert np.concatenate(alone).tobytes() == made.tobytes()


@given(st.integers(2, 9), st.integers(1, 5), st.booleans(), st.integers(0, 1000))
def test_a_decimation_is_a_gain_and_every_dth_sample(
    down: int, size: int, turns: bool, seed: int
) -> None:
    rng = np.random.default_rng(seed)
    n = size * down
    gain = np.fft.rfft(rng.standard_normal(n)) if turns else rng.random(n // 2 + 1)
    blocks = rng.standard_normal((3, n))
    expected = np.fft.irfft(np.fft.rfft(blocks) * gain, n)[:, ::down]
    made = overlap_save.apply(blocks, overlap_save.decimation_of(n, down, gain))
    assert made == pytest.approx(expected, abs=1e-12 * max(1.0, float(np.max(np.abs(expected)))))


def test_many_leaks_are_summed_in_single_precision_and_large_samples_in_double() -> None:
    up, down, n = 32, 125, 2000
    rng = np.random.default_rng(5)
    ones, after = np.ones(n // 2 + 1), np.ones(n * up // down // 2 + 1)
    between = 1e-5 * rng.standard_normal(n * up // 2 + 1)  # a stop band
    between[: n * up // down // 3] = 1
    fold = overlap_save.fold_of(n, Fraction(up, down), ones, between, after)
    leaking = sum(len(part.gain) for part in fold.leaks)
    assert leaking > 100 * len(fold.parts)
    blocks = rng.standard_normal((3, n))
    spread = np.zeros((3, n * up))
    spread[:, ::up] = blocks * up
    expected = np.fft.irfft(np.fft.rfft(spread) * between, n * up)[:, ::down]
    made = overlap_save.apply(blocks, fold)
    assert np.max(np.abs(made - expected)) < 1e-10
    large = blocks * np.array([[1.0], [1e60], [1.0]])
    beside = overlap_save.apply(large, fold)
    assert beside[::2].tobytes() == made[::2].tobytes()
    assert beside[1] == pytest.approx(1e60 * expected[1], abs=1e60 * 1e-10)


def test_signals_with_the_same_masks_share_what_becomes_of_them() -> None:
    program = program_of([BAND, DOWN], 256)
    signal = piece_of("256", 400)
    form = Form(program, 0)
    (unit,) = form.units
    whole = form.own(signal.piece, signal.piece.start_s, signal.piece.stop_s)
    other = replace(signal, x=-signal.x)
    fewer = replace(signal, excluded=signal.excluded[1:])
    made = [run_unit(unit, s, form.step_s, whole, whole) for s in (signal, other, fewer)]
    assert made[0].excluded is made[1].excluded
    assert made[0].excluded != made[2].excluded
    assert np.array_equal(made[1].x, -made[0].x)
    for s, m in zip((signal, other, fewer), made, strict=True):
        assert m.excluded == run_plainly(program, s).excluded


@given(st.integers(0, 40), st.integers(0, 40), st.integers(100, 130))
def test_the_support_is_that_of_the_taps(past: int, future: int, length: int) -> None:
    taps = np.zeros(length)
    taps[0] = taps[past] = 1.0
    taps[-future] += 1.0
    before, after = overlap_save.support(np.fft.rfft(taps), length, 1e-10)
    assert past <= before <= past + 1
    assert future <= after <= future + 1


@given(st.integers(1, 5000), st.integers(1, 300))
def test_a_fast_length_has_many_twos_and_small_factors(least: int, step: int) -> None:
    steps = overlap_save.fast_length(least, step)
    assert least <= steps <= max(32, 2 * least)
    assert steps * step % 32 == 0
    for prime in (2, 3, 5):
        while steps % prime == 0:
            steps //= prime
    assert steps == 1
