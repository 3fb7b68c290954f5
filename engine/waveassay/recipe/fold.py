"""Fold what will come out of each step along a chain, before a sample is read."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from waveassay.contract import (
    EpochsSpec,
    FeaturesSpec,
    Findings,
    Kind,
    SignalSpec,
    SinkSpec,
    Spec,
    SpectraSpec,
)
from waveassay.contract.errors import WaveassayError
from waveassay.recipe.model import Chain, Step
from waveassay.recipe.problems import Severity

_SPEC_OF: dict[Kind, type[Spec]] = {
    Kind.SIGNALS: SignalSpec,
    Kind.EPOCHS: EpochsSpec,
    Kind.SPECTRA: SpectraSpec,
    Kind.AVERAGES: SpectraSpec,
    Kind.FEATURES: FeaturesSpec,
    Kind.AVERAGE_FEATURES: FeaturesSpec,
    Kind.TABLE: SinkSpec,
    Kind.FIGURE: SinkSpec,
}


@dataclass(frozen=True)
class StepFinding:
    """What a stage says of a step before data are read.

    Attributes
    ----------
    at : the parameter meant, dotted; empty for the step as a whole.
    failed : the stage itself failed, which is its author's to mend.
    """

    step_index: int
    at: str
    message: str
    severity: Severity
    failed: bool = False


@dataclass(frozen=True)
class Folded:
    """What comes out of each step for one signal; None where nothing does."""

    specs: tuple[Spec | None, ...]
    findings: tuple[StepFinding, ...]


def fold(
    chain: Chain,
    given: SignalSpec,
    *,
    rule: str | None = None,
    owners: Mapping[str, str] | None = None,
) -> Folded:
    """Return what a chain will make of one signal.

    A step that is limited to other signals gives None for this one, and a step that takes from
    it takes what it would have taken, where that is of the same kind.

    Parameters
    ----------
    given : the signal as it is read.
    rule : the recipe's name for it, where that differs from ``given.name`` (``many: true``).
    owners : stage -> distribution, to name in messages.
    """
    return fold_steps(chain.steps, given, rule=rule, owners=owners)


def fold_steps(
    steps: Sequence[Step | None],
    given: SignalSpec,
    *,
    rule: str | None = None,
    owners: Mapping[str, str] | None = None,
) -> Folded:
    """Fold a chain of which some steps may be at fault (None); see `fold`."""
    name = given.name if rule is None else rule
    findings: list[StepFinding] = []
    specs: list[Spec | None] = []
    for index, step in enumerate(steps):
        spec: Spec | None = None
        if step is not None:
            if step.takes_from is None:
                taken: Spec | None = given if _reads(step, name) else None
            else:
                source = effective_source(steps, index, name)
                taken = None if source is None else specs[source]
            if taken is not None and (step.signals is None or name in step.signals):
                spec = _ask(index, step, taken, findings, owners or {})
        specs.append(spec)
    return Folded(tuple(specs), tuple(findings))


def _reads(step: Step, name: str) -> bool:
    return step.stage.needs is None or name in step.stage.needs(step.params)


def effective_source(steps: Sequence[Step | None], index: int, signal: str) -> int | None:
    """Return which step's output a step takes for one signal, past steps limited to others.

    None for a source, where a step in between is at fault, and where the signal does not pass.
    """
    step = steps[index]
    source = None if step is None else step.takes_from
    while source is not None:
        passed = steps[source]
        if passed is None:
            return None
        if passed.signals is None or signal in passed.signals:
            return source
        if passed.taken is not passed.given:
            return None
        source = passed.takes_from
    return None


def _ask(
    index: int,
    step: Step,
    taken: Spec,
    findings: list[StepFinding],
    owners: Mapping[str, str],
) -> Spec | None:
    """Ask a stage what comes out; whatever a stranger's function does becomes a finding."""
    heard: list[StepFinding] = []
    notes = Findings(
        on_refuse=lambda message, at: heard.append(StepFinding(index, at, message, "error")),
        on_warn=lambda message, at: heard.append(StepFinding(index, at, message, "warning")),
    )
    owner = owners.get(step.stage.name, "an unnamed distribution")
    spec: Spec | None = None
    try:
        spec = step.stage.spec(step.params, taken, notes)
    except WaveassayError as error:
        heard.append(StepFinding(index, "", str(error), "error"))
    except Exception as error:
        said = f"{type(error).__name__}: {error}"
        message = f"stage {step.stage.name} of {owner} failed while the recipe was checked: {said}"
        heard.append(StepFinding(index, "", message, "error", failed=True))
    else:
        wanted = _SPEC_OF[step.given]
        if not isinstance(spec, wanted):
            message = (
                f"stage {step.stage.name} of {owner} says that it gives {step.given}, "
                f"but its spec is a {type(spec).__name__} where a {wanted.__name__} is due"
            )
            heard.append(StepFinding(index, "", message, "error", failed=True))
            spec = None
    findings.extend(heard)
    return spec
