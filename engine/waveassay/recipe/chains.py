"""Find for each step of a chain which earlier step's output it takes."""

import re
from collections.abc import Collection, Sequence
from dataclasses import dataclass

from waveassay.contract import Kind
from waveassay.recipe.model import NAME_PATTERN, TABLE_COLUMNS, Step
from waveassay.recipe.problems import Report, nearest
from waveassay.recipe.registry import STEP_KEYS, Registry
from waveassay.recipe.steps import ReadStep

#: What exports give; nothing flows on from it.
SINKS = (Kind.TABLE, Kind.FIGURE)

_NUMBERS = (Kind.FEATURES, Kind.AVERAGE_FEATURES)


@dataclass
class _Output:
    """What a step gives, as far as it is known."""

    given: Kind | None
    taken: Kind | None
    takes_from: int | None


def default_source(kinds: Collection[Kind], given: Sequence[Kind | None]) -> int | None:
    """Return the index of the most recent output of one of these kinds, or None."""
    for index in range(len(given) - 1, -1, -1):
        kind = given[index]
        if kind in kinds and kind not in SINKS:
            return index
    return None


class _Resolver:
    def __init__(
        self, chain: str, signals: Collection[str], registry: Registry, report: Report
    ) -> None:
        self.chain = chain
        self.signals = signals
        self.registry = registry
        self.report = report
        self.read: Sequence[ReadStep] = ()
        self.outputs: list[_Output] = []
        self.aliases: dict[str, int] = {}
        self.flowing: dict[str, None] = {}  # signals that the sources so far read
        self.uncertain = False  # an earlier step is at fault, so that anything may be given

    def resolve(self, read: Sequence[ReadStep]) -> list[Step | None]:
        self.read = read
        steps: list[Step | None] = []
        for index, step in enumerate(read):
            steps.append(self._one(index, step))
            if step.stage is None or step.crowded or self.outputs[index].given is None:
                self.uncertain = True
        return steps

    def _one(self, index: int, step: ReadStep) -> Step | None:
        report, where = self.report, f"{self.chain}.{step.name}"
        before = report.errors
        out = _Output(None, None, None)
        self.outputs.append(out)
        limit, named = self._on(index, step)
        self._alias(index, step)
        if step.stage is None:
            return None
        try:
            kinds = self._kinds(step)
            if kinds == ():
                self._source(step, named)
                out.given = step.stage.kind_given(None)
            elif kinds is not None:
                out.takes_from = self._input(index, step, kinds, named)
                if out.takes_from is not None:
                    out.taken = self.outputs[out.takes_from].given
                    assert out.taken is not None
                    out.given = step.stage.kind_given(out.taken)
            elif not callable(step.stage.gives):
                out.given = step.stage.gives
        except Exception as error:  # a stranger's function
            owner = self.registry.owners.get(step.stage.name, "unknown")
            message = f"the stage of {owner} failed: {type(error).__name__}: {error}"
            report.error(step.place, "R310", message, where)
            return None
        ready = out.given is not None and (kinds == () or out.takes_from is not None)
        if step.params is None or not ready or report.errors > before:
            return None
        assert out.given is not None
        return Step(
            name=step.name,
            stage=step.stage,
            params=step.params,
            takes_from=out.takes_from,
            taken=out.taken,
            given=out.given,
            signals=limit,
            alias=step.alias[0] if step.alias else None,
            keep=step.keep,
            places=step.places,
        )

    def _kinds(self, step: ReadStep) -> tuple[Kind, ...] | None:
        """Return the kinds a step takes; None where faulty parameters would decide."""
        assert step.stage is not None
        if not callable(step.stage.takes):
            return tuple(step.stage.takes)
        return None if step.params is None else tuple(step.stage.takes(step.params))

    def _source(self, step: ReadStep, named: int | None) -> None:
        if named is not None:
            place = step.on[0][1]
            message = "a source takes no earlier output"
            self.report.error(place, "R307", message, f"{self.chain}.{step.name}.on")
        if step.stage is None or step.stage.needs is None or step.params is None:
            return
        for name in step.stage.needs(step.params):
            if name in self.signals:
                self.flowing[name] = None
                continue
            places = [p for d, p in step.places.items() if d.split(".")[0] == "signals"]
            wanted = step.params.model_dump(mode="json").get("signals")
            if isinstance(wanted, list) and name in wanted:
                at = f"signals.{wanted.index(name)}"
                place = step.places.get(at, step.place)
            else:
                place = places[0] if places else step.place
            message = (
                f"the recipe describes no signal '{name}'{nearest(name, self.signals)} "
                f"(under 'signals': {', '.join(self.signals) or 'none'})"
            )
            self.report.error(place, "R306", message, f"{self.chain}.{step.name}")

    def _on(self, index: int, step: ReadStep) -> tuple[tuple[str, ...] | None, int | None]:
        """Return the signals that ``on`` limits a step to, and the output it names."""
        where = f"{self.chain}.{step.name}.on"
        limit: dict[str, None] = {}
        named: list[int] = []
        earlier = {s.name: i for i, s in enumerate(self.read[:index]) if s.name} | self.aliases
        for name, place in step.on:
            if name not in self.signals and name in earlier:
                named.append(earlier[name])
                if len(named) == 2:
                    self.report.error(place, "R303", "a step takes one output", where)
            elif name in self.signals:
                if name not in self.flowing and not self.uncertain:
                    message = f"signal '{name}' is not read in this chain"
                    self.report.error(place, "R303", message, where)
                limit[name] = None
            else:
                later = [s.name for s in self.read[index:]]
                later += [s.alias[0] for s in self.read[index:] if s.alias]
                if name in later:
                    message = f"'{name}' does not stand before this step"
                else:
                    options = [*self.signals, *earlier]
                    message = (
                        f"no signal or earlier output '{name}'{nearest(name, options)} "
                        f"(there are: {', '.join(options) or 'none'})"
                    )
                self.report.error(place, "R303", message, where)
        return (tuple(limit) if limit else None), (named[0] if named else None)

    def _alias(self, index: int, step: ReadStep) -> None:
        if step.alias is None:
            return
        name, place = step.alias
        where = f"{self.chain}.{step.name}.as"
        if not re.fullmatch(NAME_PATTERN, name) or name in STEP_KEYS:
            message = f"a name is lower case letters, digits and underscores (found {name})"
            self.report.error(place, "R105", message, where)
        elif name in self.aliases:
            other = self.read[self.aliases[name]]
            message = f"'{name}' already names the output of {other.name} (line {other.place.line})"
            self.report.error(place, "R304", message, where)
        elif name in self.signals:
            self.report.error(place, "R304", f"'{name}' already names a signal", where)
        elif name in self.registry.stages or name in {step.name for step in self.read}:
            self.report.error(place, "R304", f"'{name}' is the name of a stage", where)
        elif name in TABLE_COLUMNS:
            self.report.error(place, "R304", f"'{name}' is a column of every table", where)
        elif (other_step := self._unnamed(name, index)) is not None:
            message = (
                f"'{name}' is what the output of {other_step.name} (line {other_step.place.line}) "
                "is called in tables already"
            )
            self.report.error(place, "R304", message, where)
        else:
            self.aliases[name] = index

    def _unnamed(self, name: str, index: int) -> ReadStep | None:
        """Return another step that goes by this name for want of an ``as``."""
        for other, step in enumerate(self.read):
            if other != index and step.alias is None and step.name.split(".", 1)[-1] == name:
                return step
        return None

    def _input(
        self, index: int, step: ReadStep, kinds: tuple[Kind, ...], named: int | None
    ) -> int | None:
        report, where = self.report, f"{self.chain}.{step.name}"
        if named is not None:
            kind = self.outputs[named].given
            if kind is not None and (kind not in kinds or kind in SINKS):
                place = next(p for n, p in step.on if n not in self.signals)
                message = (
                    f"{self.read[named].name} gives {_kind(kind)}, "
                    f"but {step.name} takes {_either(kinds)}"
                )
                report.error(place, "R307", message, f"{where}.on")
                return None
            return named if kind is not None else None
        given = [out.given for out in self.outputs[:index]]
        found = default_source(kinds, given)
        if found is None:
            if not self.uncertain and index > 0:
                self._nothing_given(step, kinds, where)
            return None
        assert step.stage is not None
        gives_signals = given[found] is Kind.SIGNALS and (
            step.stage.kind_given(Kind.SIGNALS) is Kind.SIGNALS
        )
        cut = [i for i in range(found + 1, index) if given[i] is Kind.EPOCHS]
        if gives_signals and cut and not step.on:
            epoch = self.read[cut[0]]
            message = (
                f"stands after {epoch.name} (line {epoch.place.line}), which has already cut "
                "its epochs from the signal as it was before this step; move this step before "
                f"{epoch.name}, or say with 'on' what it is to take"
            )
            report.error(step.place, "R305", message, where)
        return found

    def _nothing_given(self, step: ReadStep, kinds: tuple[Kind, ...], where: str) -> None:
        givers = [name for name in self.registry.giving(kinds) if name != step.name]
        verb = "does" if len(givers) == 1 else "do"
        hint = f"; {_listed(givers, 'and')} {verb}" if givers else ""
        message = f"needs {_either(kinds)}; no step before it gives them{hint}"
        self.report.error(step.place, "R302", message, where)


def _kind(kind: Kind) -> str:
    names = {Kind.AVERAGES: "averaged spectra", Kind.TABLE: "a table", Kind.FIGURE: "a figure"}
    return names.get(kind, str(kind))


def _listed(names: Sequence[str], word: str) -> str:
    *first, last = names
    return f"{', '.join(first)} {word} {last}" if first else last


def _either(kinds: Sequence[Kind]) -> str:
    return _listed([_kind(kind) for kind in kinds], "or")


def resolve_chain(
    chain: str,
    read: Sequence[ReadStep],
    signals: Collection[str],
    registry: Registry,
    report: Report,
) -> list[Step | None]:
    """Return the chain's steps with what each takes; None for a step at fault.

    Parameters
    ----------
    signals : names of the signals that the recipe describes.
    """
    if read and read[0].stage is not None:
        stage = read[0].stage
        if callable(stage.takes) or stage.takes:
            sources = [
                n for n, s in registry.stages.items() if not callable(s.takes) and not s.takes
            ]
            hint = f", such as {_listed(sources, 'or')}" if sources else ""
            message = f"a chain begins with a step that reads signals{hint}"
            report.error(read[0].place, "R301", message, f"{chain}.{read[0].name}")
    return _Resolver(chain, signals, registry, report).resolve(read)


def warn_of_unused(chain: str, steps: Sequence[Step], report: Report) -> None:
    """Warn of each output that no later step takes and that the engine does not write."""
    used = {step.takes_from for step in steps}
    last_table = max((i for i, step in enumerate(steps) if step.given is Kind.TABLE), default=-1)
    for index, step in enumerate(steps):
        if index in used or step.given in SINKS or step.given is Kind.AVERAGES:
            continue
        if step.given in _NUMBERS and index < last_table:
            continue
        message = f"gives {_kind(step.given)} that no later step uses"
        if step.given in _NUMBERS:
            message += "; put an export.table behind it, or leave it out"
        report.warn(step.places[""], "W402", message, f"{chain}.{step.name}")
