"""Steps on rows are given samples as the precision says; all others, and later passes, float64."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from chains import piece_of
from contract_stages import HONEST, HONEST_ROWS, size, size_spec
from waveassay.contract import Epochs, Features, Kind, Part, Signal, SignalSpec, Stage, Whole
from waveassay.execute.prepare import prepare
from waveassay.execute.rows import make_rows
from waveassay.execute.signals import SignalSource
from waveassay.plan.passage import Lane, Passage
from waveassay.plan.precision import held_in_store
from waveassay.plan.program import Program
from waveassay.plan.routes import Routes
from waveassay.plan.stretches import Stretch
from waveassay.recipe import Registry, check_recipe, load_registry

RATE_HZ, LENGTH_S = 128, 40
RECIPE = """\
recipe: held
edition: 1
precision: {precision}
signals:
  frontal: {{labels: [Fp1], unit: uV, modality: eeg}}
chains:
  c:
    - load: {{signals: [frontal]}}
{steps}
    - epoch.consecutive: {{length: 4 s}}
    - spy.rows
    - export.table
"""
PASS = "filter.butterworth: {high_pass: 0.5 Hz}"


@dataclass
class Spies:
    """Stages that note how they are given samples."""

    given: dict[str, set[str]]

    def note(self, name: str, x: Any) -> None:
        self.given.setdefault(name, set()).add(str(x.dtype))

    def registry(self) -> Registry:
        known = load_registry()
        stages = {stage.name: stage for stage in (self.rows(), self.barrier(), self.gather())}
        return replace(known, stages={**known.stages, **stages})

    def rows(self) -> Stage:
        def run(params: Any, epochs: Epochs) -> Features:
            self.note("rows", epochs.samples())
            return size(params, epochs)

        return replace(HONEST_ROWS, name="spy.rows", run=run)

    def barrier(self) -> Stage:
        """Return a step on samples that needs the whole."""

        def collect(params: Any, signal: Signal) -> Part:
            self.note("collect", signal.x)
            return {"count": np.array([signal.x.size])}

        def combine(params: Any, parts: Sequence[Part]) -> Part:
            return parts[0]

        def apply(params: Any, signal: Signal, state: Part) -> Signal:
            self.note("apply", signal.x)
            return signal

        return replace(HONEST, name="spy.barrier", run=None, context=Whole(collect, combine, apply))

    def gather(self) -> Stage:
        """Return a step that takes samples and gives one row of features."""

        def collect(params: Any, signal: Signal) -> Part:
            self.note("gather", signal.x)
            return {"count": np.array([signal.x.size])}

        def combine(params: Any, parts: Sequence[Part]) -> Features:
            raise NotImplementedError("collecting is all that is looked at")

        return replace(
            HONEST,
            name="spy.gather",
            gives=Kind.AVERAGE_FEATURES,
            spec=lambda params, given, findings: size_spec(params, _cut(given), findings),
            run=None,
            context=Whole(collect, combine),
        )


def _cut(given: SignalSpec) -> Any:
    @dataclass
    class Of:
        signal: SignalSpec

    return Of(given)


class Reading(SignalSource):
    """A source that has its signal in memory, in float64."""

    def by_lane(
        self, wanted: Sequence[Mapping[int, Any]]
    ) -> Iterator[tuple[int, dict[int, Signal]]]:
        signal = piece_of(RATE_HZ, LENGTH_S)
        for lane_no, windows in enumerate(wanted):
            yield lane_no, dict.fromkeys(windows, signal)


def passage_of(steps: Sequence[str], precision: str, spies: Spies) -> Passage:
    text = RECIPE.format(precision=precision, steps="\n".join(f"    - {step}" for step in steps))
    checked = check_recipe(text, "r", spies.registry())
    assert checked.recipe is not None, checked.problems
    chain = checked.recipe.chains["c"]
    spec = SignalSpec("frontal", "uV", "eeg", Fraction(RATE_HZ))
    route = Routes(checked.recipe).route(chain, "frontal", spec)
    piece = piece_of(RATE_HZ, LENGTH_S).piece
    borders = ((piece.start_s, piece.stop_s),)
    lane = Lane("frontal", "frontal", 0, "Fp1", 1.0, route, borders)
    held = checked.recipe.precision
    return Passage("r", "", chain, held, (piece,), (), (lane,), (), ())


def given_in_a_run(steps: Sequence[str], precision: str, folder: Path) -> dict[str, set[str]]:
    """Do the tasks of every pass; return how each spy was given samples."""
    spies = Spies({})
    passage = passage_of(steps, precision, spies)
    source = Reading(passage, Path(), None, None, 0, {})  # type: ignore[arg-type]
    count = {"count": np.array([1])}
    moves = passage.lanes[0].program.moves
    states = {(0, index): count for index, move in moves.items() if move.barrier is not None}
    for pass_no in range(passage.passes):
        for task in (prepare, make_rows):
            task(source, pass_no, Stretch(0, 0), states, folder)
    return spies.given


@pytest.mark.parametrize("precision", ["standard", "double"])
def test_only_rows_are_given_float32(precision: str, tmp_path: Path) -> None:
    steps = [PASS, "{spy.gather: {}, on: [filter.butterworth]}", "spy.barrier"]
    given = given_in_a_run(steps, precision, tmp_path)
    rows = "float32" if precision == "standard" else "float64"
    double = {"float64"}
    assert given == {"rows": {rows}, "gather": double, "collect": double, "apply": double}


def test_without_a_high_pass_rows_are_given_float64(tmp_path: Path) -> None:
    low = "filter.butterworth: {low_pass: 40 Hz}"
    for steps in ([], [low], [low, "spy.barrier"]):
        assert given_in_a_run(steps, "standard", tmp_path)["rows"] == {"float64"}
    assert given_in_a_run([low, PASS], "standard", tmp_path)["rows"] == {"float32"}


@pytest.mark.parametrize(
    ("steps", "held"),
    [
        ([PASS], {1: "float32"}),
        ([PASS, "resample: {rate: 64 Hz}"], {2: "float32"}),
        ([PASS, "{resample: {rate: 64 Hz}, keep: true}"], {2: "float64"}),
        # The barrier reads what was filtered again, in the next pass.
        ([PASS, "spy.barrier"], {1: "float64", 2: "float32"}),
        ([PASS, "{spy.gather: {}, on: [filter.butterworth]}"], {1: "float64"}),
        (["filter.butterworth: {low_pass: 40 Hz}"], {1: "float64"}),
    ],
)
def test_the_store_holds_what_its_takers_are_given(
    steps: Sequence[str], held: Mapping[int, str]
) -> None:
    program = passage_of(steps, "standard", Spies({})).lanes[0].program
    stored = _stored(program)
    assert {index: held_in_store(program, index, "standard") for index in stored} == held
    assert {held_in_store(program, index, "double") for index in stored} == {"float64"}


def _stored(program: Program) -> list[int]:
    return [index for p in range(program.passes) for index in program.kept_signals(p)]
