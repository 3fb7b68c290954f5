"""What a stage is: parameters, what it takes and gives, and one pure function."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any

from numpy.typing import NDArray

from waveassay.contract.kinds import Data, Kind
from waveassay.contract.params import Params
from waveassay.contract.response import Response
from waveassay.contract.spec import Derived, Findings, Spec

#: A moment of a filter's output may depend on samples outside its reach by at most this share
#: of the largest of them.
REACH_TOLERANCE = 1e-10


@dataclass(frozen=True)
class Reach:
    """A moment of the output depends on this much input before and after it."""

    before_s: Fraction
    after_s: Fraction

    def __add__(self, other: "Reach") -> "Reach":
        return Reach(self.before_s + other.before_s, self.after_s + other.after_s)


@dataclass(frozen=True)
class EachRow:
    """Every row (epoch, spectrum) of the output depends on the same row of the input alone."""


Part = Mapping[str, NDArray[Any]]


@dataclass(frozen=True)
class Whole:
    """The output depends on all of a signal's recording, gathered in three moves.

    ``collect(params, data)`` is run on each stretch and returns named arrays, as small as may be.
    ``combine(params, parts)`` is run once a signal, on the parts in order of time.
    Without ``apply``, what it returns is the output (an average, a figure; the parts of a figure
    also hold ``recording``, its recording's name, for the title). With ``apply``, it
    returns named arrays again, and ``apply(params, data, state)`` turns each stretch into output.
    """

    collect: Callable[[Any, Any], Part]
    combine: Callable[[Any, Sequence[Part]], Any]
    apply: Callable[[Any, Any, Part], Any] | None = None


Context = Callable[[Any, Any], Reach] | EachRow | Whole


@dataclass(frozen=True)
class Stage:
    """A named, versioned operation on one signal's data.

    Attributes
    ----------
    name : ``family.method``, or one word.
    version : goes up whenever the numbers can change.
    params : its `Params` class.
    takes : the kinds it accepts, any one of them; a function of the parameters where they decide.
        Empty for a source.
    gives : the kind it returns; a function of the kind taken where that decides.
    spec : ``spec(params, given, findings)``: what comes out, without data. ``given`` is the spec
        of what it takes. It refuses and warns through ``findings``.
    run : ``run(params, data)``: arrays in, arrays out; no files, no globals, no state.
        None for a source, and where a `Whole` context does the work.
    context : what a moment of the output depends on. `EachRow`; a function
        ``(params, spec) -> Reach``; or a `Whole`. None: the whole piece is given at once, which is
        always right but not bounded in memory.
    response : for a stage that is linear and time-invariant on samples, its frequency response, so
        that it runs as one with such neighbours; it goes with a `Reach`. None: `run` is run.
    example : parameters as a recipe writes them, for help, schema and the contract's checks.
    source : the published source of the method, or 'common practice, no source'.
    derive : ``derive(params, given)``: numbers that the parameters leave to the data's rate, such
        as the gain measured at a cut-off or the number of tapers. They go into the run folder.
    needs : for a source: ``needs(params)`` names the signals to read.
    reads_truncated : for a source: whether a file that ends before its header says is read as far
        as it goes.
    """

    name: str
    version: int
    params: type[Params]
    takes: tuple[Kind, ...] | Callable[[Any], tuple[Kind, ...]]
    gives: Kind | Callable[[Kind], Kind]
    spec: Callable[[Any, Any, Findings], Spec]
    run: Callable[[Any, Any], Data] | None = None
    context: Context | None = None
    response: Response | None = None
    example: Mapping[str, Any] = field(default_factory=dict)
    source: str = "common practice, no source"
    derive: Callable[[Any, Any], Sequence[Derived]] | None = None
    needs: Callable[[Any], tuple[str, ...]] | None = None
    reads_truncated: Callable[[Any], bool] | None = None

    def kinds_taken(self, params: Params) -> tuple[Kind, ...]:
        """Return the kinds it accepts with these parameters."""
        return self.takes(params) if callable(self.takes) else self.takes

    def kind_given(self, taken: Kind | None) -> Kind:
        """Return the kind it gives when it takes that one."""
        if callable(self.gives):
            if taken is None:
                raise TypeError(f"{self.name}: a source gives one kind")
            return self.gives(taken)
        return self.gives

    @property
    def summary(self) -> str:
        """The first sentence of the stage's module."""
        import sys

        doc = sys.modules[self.params.__module__].__doc__ or ""
        return doc.strip().split("\n\n")[0].replace("\n", " ")


def features_of(taken: Kind) -> Kind:
    """Return the kind of features that come from spectra or from averaged spectra."""
    return Kind.AVERAGE_FEATURES if taken is Kind.AVERAGES else Kind.FEATURES
