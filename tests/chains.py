"""Chains on samples, compiled for a signal in memory, and run without files."""

from collections.abc import Sequence
from fractions import Fraction
from itertools import pairwise

import numpy as np

from waveassay.contract import Exclusion, Interval, Signal, SignalSpec, merged
from waveassay.execute.moves import run_move
from waveassay.execute.prepare import run_form
from waveassay.plan.program import Level, Program, compile_program
from waveassay.plan.windows import Form
from waveassay.recipe import RecipeError, check_recipe
from waveassay.recipe.fold import fold

RECIPE = """\
recipe: chain
edition: 1
title: Steps on samples
purpose: To be run in memory
signals:
  frontal: {labels: ["EEG Fp1-F7"], unit: uV, modality: eeg}
chains:
  cortex:
    - load: {signals: [frontal]}
"""
ROWS = """\
    - epoch.consecutive: {length: 4 s}
    - spectrum.periodogram: {}
    - feature.spectral_edge: {within: [5 Hz, 15 Hz]}
    - export.table: {}
"""


def program_of(steps: Sequence[str], rate_hz: Fraction | int | str) -> Program:
    """Return the program of a chain of steps on samples, as a recipe writes them.

    Raises
    ------
    RecipeError
        When the recipe is unsound.
    """
    text = RECIPE + "".join(f"    - {step}\n" for step in steps) + ROWS
    checked = check_recipe(text, "recipe.yaml")
    if checked.recipe is None:
        raise RecipeError(checked.problems)
    chain = checked.recipe.chains["cortex"]
    spec = SignalSpec("frontal", "uV", "eeg", Fraction(rate_hz))
    return compile_program(chain, "frontal", spec, fold(chain, spec))


def piece_of(rate_hz: Fraction | int | str, length_s: int, seed: int = 1) -> Signal:
    """Return a piece with an offset, drift, noise, two artefacts and masks of two reasons."""
    rate = Fraction(rate_hz)
    count = int(length_s * rate)
    rng = np.random.default_rng([seed, count])
    drift = np.cumsum(rng.standard_normal(count)) * 30 / np.sqrt(count)
    x = 40 + 10 * rng.standard_normal(count) + drift
    x[count // 3 : count // 3 + 7] += 800
    x[2 * count // 3] -= 800
    start_s = Fraction(1237, 1000)
    masks = [
        Exclusion(start_s + at, start_s + at + Fraction(int(rng.integers(1, 4000)), 1000), reason)
        for number, reason in enumerate(("one", "other"))
        for at in range(17 + 40 * number, length_s - 4, 97)
    ]
    piece = Interval(start_s, start_s + count / rate)
    return Signal("frontal", "uV", rate, start_s, x, piece, merged(masks))


def borders_s(piece: Interval, program: Program, stretch_s: Fraction) -> list[Fraction]:
    """Return borders of stretches of about a length, on the program's grid."""
    step_s = program.grid_step_s
    count = max(1, int(piece.length_s / stretch_s))
    inner = [piece.start_s + k * stretch_s // step_s * step_s for k in range(1, count)]
    return [piece.start_s, *dict.fromkeys(t for t in inner if t > piece.start_s), piece.stop_s]


def run_by_form(program: Program, signal: Signal, start_s: Fraction, stop_s: Fraction) -> Signal:
    """Return what a pass keeps from start to stop, given what the plan says it reads."""
    form = Form(program, 0)
    (kept,) = form.kept
    source = form.units[0].source
    window = form.window_s(signal.piece, start_s, stop_s)
    values = {source: signal.cut(*window)}
    run_form(form, 0, values, {}, signal.piece, (start_s, stop_s))
    return values[kept].cut(start_s, stop_s)


def run_in_stretches(program: Program, signal: Signal, stretch_s: Fraction) -> Signal:
    """Return a piece run by stretches of about a length and joined, the last stretch first."""
    borders = borders_s(signal.piece, program, stretch_s)
    parts = [run_by_form(program, signal, *pair) for pair in list(pairwise(borders))[::-1]][::-1]
    masks = merged(item for part in parts for item in part.excluded)
    x = np.concatenate([part.x for part in parts])
    return parts[0].with_samples(x).excluding(masks)


def run_plainly(program: Program, signal: Signal) -> Signal:
    """Return a whole piece after the steps' own functions, one after another."""
    for move in program.moves.values():
        if move.level is Level.SAMPLES and move.source is not None:
            made = run_move(move, signal)
            assert isinstance(made, Signal)
            signal = made
    return signal.cut(signal.piece.start_s, signal.piece.stop_s)
