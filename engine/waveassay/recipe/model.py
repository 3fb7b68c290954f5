"""A recipe, checked: what the planner works from."""

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field, JsonValue

from waveassay.contract import Kind, Params, Seconds, Stage

NAME_PATTERN = r"^[a-z][a-z0-9_]*$"
Name = Annotated[str, Field(pattern=NAME_PATTERN)]
RecipeName = Annotated[str, Field(pattern=r"^[a-z0-9][a-z0-9-]*$")]
Precision = Literal["standard", "double"]

#: Columns that every table of epochs or averages has; no feature may take their names.
TABLE_COLUMNS = frozenset(
    {
        "recording", "signal", "signal_2", "condition", "epoch", "epochs", "start_s", "duration_s",
        "kept", "reason", "missing_reason",
    }
)  # fmt: skip


class _Part(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, allow_inf_nan=False)


class Numerics(_Part):
    """How numbers are held on their way through all chains."""

    precision: Precision = Field(
        default="standard",
        description="standard: filters, sums and features in float64; the samples that epochs "
        "take behind a high-pass, and their spectra, in float32. double: everything in float64.",
    )


class SignalRule(_Part):
    """How a signal is found in a recording, and the unit it is brought to."""

    labels: tuple[str, ...] = Field(
        min_length=1, description="Labels it may have in a file, best first; '*' stands for any."
    )
    unit: str = Field(description="Unit it is brought to, such as uV or mmHg.")
    modality: str | None = Field(default=None, description="What it measures: eeg, pressure, ecg.")
    many: bool = Field(default=False, description="One name for every signal that matches.")
    optional: bool = Field(default=False, description="A recording without it is not a failure.")


class Anchor(_Part):
    """A moment of a recording: an annotation, a time from its start, or a time of day."""

    annotation: str | None = Field(
        default=None,
        min_length=1,
        description="Text of an annotation, whole; case and outer spaces ignored.",
    )
    time: Seconds | None = Field(default=None, ge=0, description="Time from the recording's start.")
    clock: str | None = Field(
        default=None,
        pattern=r"^([01]?\d|2[0-3]):[0-5]\d(:[0-5]\d(\.\d+)?)?$",
        description="Time of day, such as 14:30:00; the first one after the recording's start.",
    )
    offset: Seconds = Field(default=0.0, description="Added to the moment; may be negative.")
    which: Literal["first", "last", "each"] | None = Field(
        default=None, description="Which one, where the annotation stands more than once."
    )


class ConditionRule(_Part):
    """A named stretch of time.

    Without start it begins, and without end and length it ends, with the recording.
    """

    start: Anchor | None = Field(default=None, description="Where it starts.")
    end: Anchor | None = Field(default=None, description="Where it ends.")
    length: Seconds | None = Field(default=None, gt=0, description="How long it is.")


class Citation(_Part):
    """Where the method was published."""

    text: str = Field(description="The reference as one would print it.")
    doi: str | None = Field(default=None, description="Its DOI.")


class Origin(_Part):
    """Who says that a parameter has its value."""

    origin: Literal["stated", "inferred", "assumed", "site", "default"] = Field(
        description="How the value was come by."
    )
    where: str | None = Field(default=None, description="Where the source states it.")
    why: str | None = Field(default=None, description="Why this value, where none is stated.")
    alternatives: tuple[JsonValue, ...] = Field(
        default=(), description="Other values that the source leaves open."
    )


@dataclass(frozen=True)
class Place:
    """A place in a file, counted from 1."""

    path: str
    line: int
    column: int

    def __str__(self) -> str:
        return f"{self.path}:{self.line}:{self.column}"


@dataclass(frozen=True)
class Step:
    """A stage with its parameters, at a place in a chain.

    Attributes
    ----------
    name : the stage's name, with ``#2`` where it stands a second time in its chain.
    takes_from : index in the chain of the step whose output it takes; None for a source.
    taken, given : kinds it takes and gives.
    signals : names of signals it is limited to by ``on``; None for all that flow.
    alias : the ``as`` name of its output.
    keep : the recipe asks that its output be kept in the store.
    places : dotted parameter -> where it stands; the empty key is the step itself.
    """

    name: str
    stage: Stage
    params: Params
    takes_from: int | None
    taken: Kind | None
    given: Kind
    signals: tuple[str, ...] | None
    alias: str | None
    keep: bool
    places: Mapping[str, Place]


@dataclass(frozen=True)
class Chain:
    """Steps in order, on some of the signals."""

    name: str
    steps: tuple[Step, ...]

    @property
    def signals(self) -> tuple[str, ...]:
        """Names of the signals that its sources read, in the order first named."""
        names: dict[str, None] = {}
        for step in self.steps:
            if step.stage.needs is not None:
                names.update(dict.fromkeys(step.stage.needs(step.params)))
        return tuple(names)


@dataclass(frozen=True)
class Recipe:
    """A checked recipe.

    Attributes
    ----------
    text : the file as given.
    numerics : how numbers are held; the same for all chains.
    digest : of the canonical form; what can change a number changes it, and nothing else does.
    """

    path: str
    text: str
    name: str
    edition: int
    title: str
    purpose: str
    citation: Citation | None
    numerics: Numerics
    signals: Mapping[str, SignalRule]
    conditions: Mapping[str, ConditionRule]
    chains: Mapping[str, Chain]
    origins: Mapping[str, Origin]
    digest: str

    @property
    def precision(self) -> Precision:
        """In which precision samples are handed to epochs, and spectra held."""
        return self.numerics.precision

    @property
    def truncated(self) -> Literal["refuse", "read"]:
        """What becomes of a file that ends before its header says, as its sources ask."""
        sources = (step for _, _, step in self.steps() if step.stage.reads_truncated is not None)
        reads = any(s.stage.reads_truncated and s.stage.reads_truncated(s.params) for s in sources)
        return "read" if reads else "refuse"

    def steps(self) -> Iterator[tuple[Chain, int, Step]]:
        """Yield every step with its chain and its place in it."""
        for chain in self.chains.values():
            for index, step in enumerate(chain.steps):
                yield chain, index, step
