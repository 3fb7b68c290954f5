"""One recording's passage through one chain: its signals, their programs and their stretches."""

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from fractions import Fraction
from functools import cached_property
from typing import TYPE_CHECKING

from waveassay.contract import Condition, Interval, SignalError, SignalSpec
from waveassay.plan.columns import FeatureColumn
from waveassay.plan.conditions import resolve_conditions
from waveassay.plan.labels import unit_scale
from waveassay.plan.program import Program
from waveassay.plan.routes import Route, Routes
from waveassay.plan.stretches import Stretch, bounds_s
from waveassay.plan.windows import Form
from waveassay.recipe.model import Chain, Precision
from waveassay.recording import Facts, SignalFacts

if TYPE_CHECKING:
    from waveassay.plan.drafts import Draft


@dataclass(frozen=True)
class Lane:
    """One signal on its way through a chain.

    Attributes
    ----------
    signal : its name in tables.
    role : the recipe's name of it; the same, unless one name stands for many signals.
    channel : its index in the file.
    label : its label in the file.
    scale : what turns the file's unit into the recipe's.
    borders_s : for each piece, the stretches' borders.
    """

    signal: str
    role: str
    channel: int
    label: str
    scale: float
    route: Route
    borders_s: tuple[tuple[Fraction, ...], ...]

    @property
    def spec(self) -> SignalSpec:
        """The signal as it is read."""
        return self.route.spec

    @property
    def program(self) -> Program:
        """What is to be done with it."""
        return self.route.program

    def bounds_s(self, stretch: Stretch) -> tuple[Fraction, Fraction]:
        """Return this signal's own borders of a stretch."""
        borders = self.borders_s[stretch.piece]
        return borders[stretch.number], borders[stretch.number + 1]

    @property
    def forms(self) -> tuple[Form, ...]:
        """How each pass over its samples is carried out."""
        return self.route.forms


@dataclass
class Shared:
    """What follows from the passages of all recordings that are alike, once it is known.

    See `waveassay.plan.drafts`.
    """

    drafts: "tuple[Draft, ...] | None" = None
    holders: tuple[tuple[str, tuple[int, ...]], ...] | None = None


@dataclass(frozen=True)
class Passage:
    """One recording's passage through one chain.

    Attributes
    ----------
    precision : of the recipe; see `waveassay.plan.precision`.
    shared : with the passages of all recordings that are alike, which differ in name and digest.
    """

    recording: str
    sha256: str
    chain: Chain
    precision: Precision
    pieces: tuple[Interval, ...]
    conditions: tuple[Condition, ...]
    lanes: tuple[Lane, ...]
    columns: tuple[FeatureColumn, ...]
    warnings: tuple[str, ...]
    shared: Shared = field(default_factory=Shared, compare=False, repr=False)

    @cached_property
    def stretches(self) -> tuple[Stretch, ...]:
        """All stretches, in order of time."""
        if not self.lanes:
            return ()
        return tuple(
            Stretch(piece, number)
            for piece, borders in enumerate(self.lanes[0].borders_s)
            for number in range(len(borders) - 1)
        )

    @property
    def passes(self) -> int:
        """How often the recording is passed over."""
        return max((lane.program.passes for lane in self.lanes), default=0)


@dataclass(frozen=True)
class Alike:
    """What the passages of recordings have in common that are alike: all but name and digest."""

    ways: tuple[Passage, ...]
    warnings: tuple[str, ...]


def passages(
    routes: Routes, recording: str, sha256: str, facts: Facts
) -> tuple[tuple[Passage, ...], tuple[str, ...]]:
    """Return the recording's passage through every chain, and warnings about the recording.

    Parameters
    ----------
    routes : of the recipe; what recordings share is worked out there once.

    Raises
    ------
    SignalError
        When a signal or an annotation cannot be matched, a unit does not fit, or a stage refuses
        what the recording has (a band above its Nyquist frequency).
    """
    conditions = resolve_conditions(
        routes.recipe.conditions, facts.annotations, facts.start, facts.duration_s
    )
    signals = tuple((s.index, s.label, s.unit, s.rate_hz) for s in facts.signals)
    alike = routes.alike(
        (signals, facts.pieces, conditions), lambda: _alike(routes, facts, conditions)
    )
    ways = tuple(replace(way, recording=recording, sha256=sha256) for way in alike.ways)
    return ways, tuple(dict.fromkeys((*facts.warnings, *alike.warnings)))


def _alike(routes: Routes, facts: Facts, conditions: tuple[Condition, ...]) -> Alike:
    """Work out the passages of a recording; of its facts no others count than those it is alike in.

    Those are the signals' places, labels, units and rates, the pieces and the conditions.
    """
    matched = routes.matched([signal.label for signal in facts.signals])
    ways = tuple(
        _passage(routes, chain, facts, conditions, matched)
        for chain in routes.recipe.chains.values()
    )
    warnings = [text for way in ways for text in way.warnings]
    empty = [way.chain.name for way in ways if not way.lanes]
    if empty:
        warnings.append(f"nothing to do in {', '.join(empty)}: no signal of theirs is in the file")
    return Alike(ways, tuple(warnings))


def _passage(
    routes: Routes,
    chain: Chain,
    facts: Facts,
    conditions: tuple[Condition, ...],
    matched: Mapping[str, tuple[tuple[str, int], ...]],
) -> Passage:
    refusals: dict[str, list[str]] = {}
    warnings: dict[str, list[str]] = {}
    planned: list[tuple[str, str, SignalFacts, float, Route]] = []
    for role in chain.signals:
        rule = routes.recipe.signals[role]
        for name, place in matched[role]:
            file_signal = facts.signals[place]
            scale = unit_scale(rule.unit, file_signal.unit, file_signal.label)
            spec = SignalSpec(name, rule.unit, rule.modality, file_signal.rate_hz)
            route = routes.route(chain, role, spec)
            for finding in route.findings:
                step = chain.steps[finding.step_index]
                line = (step.places.get(finding.at) or step.places[""]).line
                text = f"{chain.name}.{step.name} (line {line}): {finding.message}"
                told = refusals if finding.severity == "error" else warnings
                told.setdefault(text, []).append(name)
            planned.append((name, role, file_signal, scale, route))
    if refusals:
        raise SignalError("; ".join(_with_signals(refusals)))
    whole = any(route.program.whole_pieces() for *_, route in planned)
    lanes = []
    borders_by_step: dict[Fraction, tuple[tuple[Fraction, ...], ...]] = {}
    for name, role, file_signal, scale, route in planned:
        for text in _short_pieces(chain, route.program, facts.pieces):
            warnings.setdefault(text, []).append(name)
        step_s = route.program.grid_step_s
        borders = borders_by_step.get(step_s)
        if borders is None:
            borders = tuple(bounds_s(piece, step_s, whole=whole) for piece in facts.pieces)
            borders_by_step[step_s] = borders
        lanes.append(Lane(name, role, file_signal.index, file_signal.label, scale, route, borders))
    return Passage(
        "",
        "",
        chain,
        routes.recipe.precision,
        facts.pieces,
        conditions,
        tuple(lanes),
        routes.columns[chain.name],
        tuple(_with_signals(warnings)),
    )


def _with_signals(told: Mapping[str, list[str]]) -> list[str]:
    """Return each message once, with the signals that it concerns."""
    return [f"{text} (signal {', '.join(dict.fromkeys(names))})" for text, names in told.items()]


def _short_pieces(chain: Chain, program: Program, pieces: tuple[Interval, ...]) -> list[str]:
    response_s = max(
        (
            move.spec_out.response_s
            for move in program.moves.values()
            if isinstance(move.spec_out, SignalSpec)
        ),
        default=0.0,
    )
    return [
        f"{chain.name}: piece {number} is {float(piece.length_s):g} s long, shorter than the "
        f"response of its filters ({response_s:.3g} s above 1 %)"
        for number, piece in enumerate(pieces, start=1)
        if float(piece.length_s) < response_s
    ]
