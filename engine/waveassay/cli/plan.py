"""How the steps on samples will be run, and what takes them: ``waveassay check --plan``."""

from collections.abc import Iterable, Mapping

from waveassay.cli.screen import console
from waveassay.contract import SignalSpec
from waveassay.plan.fusing import explained
from waveassay.plan.passage import Passage
from waveassay.plan.precision import takers_of_rows
from waveassay.plan.program import Program, compile_program
from waveassay.recipe.fold import fold
from waveassay.recipe.model import Precision, Recipe

#: (chain, program, what it is for) of one signal.
Compiled = tuple[str, Program, str]


def from_recipe(recipe: Recipe) -> Iterable[Compiled]:
    """Yield what is known before there is a recording: rates may be missing."""
    for chain in recipe.chains.values():
        for role in chain.signals:
            rule = recipe.signals[role]
            spec = SignalSpec(role, rule.unit, rule.modality)
            yield chain.name, compile_program(chain, role, spec, fold(chain, spec)), role


def from_passages(passages: Iterable[Passage]) -> Iterable[Compiled]:
    """Yield what will be run over a recording's signals."""
    for passage in passages:
        for lane in passage.lanes:
            rate = f"{float(lane.spec.rate_hz or 0):.10g} Hz"
            yield passage.chain.name, lane.program, f"{lane.role} at {rate}"


def show_plan(compiled: Iterable[Compiled], precision: Precision) -> None:
    """Print per chain how each step on samples is run, once for all signals that are run alike."""
    alike: dict[tuple[str, tuple[tuple[str, str], ...]], dict[str, None]] = {}
    for chain, program, what in compiled:
        run = [(told.step, told.text) for told in explained(program)]
        given = [
            (move.step.name, f"given samples as {held}")
            for move, held in takers_of_rows(program, precision)
        ]
        alike.setdefault((chain, (*run, *given)), {})[what] = None
    _print(alike)


def _print(alike: Mapping[tuple[str, tuple[tuple[str, str], ...]], Iterable[str]]) -> None:
    screen = console()
    for (chain, steps), signals in alike.items():
        screen.print(f"{chain} ({', '.join(signals)}):")
        if not steps:
            screen.print("  no steps on samples")
        wide = max((len(step) for step, _ in steps), default=0)
        for step, text in steps:
            screen.print(f"  {step:<{wide}}  {text}")
