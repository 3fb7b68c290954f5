"""What will come out of a step, known before a sample is read."""

from collections.abc import Callable
from dataclasses import dataclass, replace
from fractions import Fraction


@dataclass(frozen=True)
class SignalSpec:
    """A signal to come.

    Attributes
    ----------
    rate_hz : None while only the recipe is known and no step has set it.
    pass_hz : what filters left, (low, high); None where nothing bounds it.
    response_s : longest time, to either side, that a filter's response stays above 1 %.
    """

    name: str
    unit: str
    modality: str | None = None
    rate_hz: Fraction | None = None
    pass_hz: tuple[float | None, float | None] = (None, None)
    response_s: float = 0.0

    @property
    def nyquist_hz(self) -> float | None:
        """Half the rate, where it is known."""
        return None if self.rate_hz is None else float(self.rate_hz / 2)

    def passing(
        self, low_hz: float | None, high_hz: float | None, response_s: float
    ) -> "SignalSpec":
        """Return the signal after a filter that leaves low to high."""
        low, high = self.pass_hz
        lows = [v for v in (low, low_hz) if v is not None]
        highs = [v for v in (high, high_hz) if v is not None]
        return replace(
            self,
            pass_hz=(max(lows, default=None), min(highs, default=None)),
            response_s=max(self.response_s, response_s),
        )


@dataclass(frozen=True)
class EpochsSpec:
    """Epochs to come, of equal length."""

    signal: SignalSpec
    length_s: float
    step_s: float


@dataclass(frozen=True)
class SpectraSpec:
    """Spectra to come.

    Attributes
    ----------
    resolution_hz : true resolution; None while it depends on a rate that is not known.
    top_hz : highest bin, likewise.
    window_s : the length of signal in one transform.
    averaged : one row a condition instead of one an epoch.
    in_decibels : the average was taken over decibels (the density is a geometric mean).
    """

    signal: SignalSpec
    window_s: float
    resolution_hz: float | None
    bin_hz: float | None
    top_hz: float | None
    averaged: bool = False
    in_decibels: bool = False


@dataclass(frozen=True)
class ColumnSpec:
    """One column of features to come. ``part`` is empty for a feature of one number."""

    part: str
    unit: str
    meaning: str


@dataclass(frozen=True)
class FeaturesSpec:
    """Features to come."""

    signal: SignalSpec
    columns: tuple[ColumnSpec, ...]
    averaged: bool = False


@dataclass(frozen=True)
class SinkSpec:
    """Nothing flows on from an export."""

    signal: SignalSpec


@dataclass(frozen=True)
class Derived:
    """What follows from parameters and rate, and must be known to repeat or report a step."""

    quantity: str
    value: float | int | str
    unit: str = ""


Spec = SignalSpec | EpochsSpec | SpectraSpec | FeaturesSpec | SinkSpec


@dataclass(frozen=True)
class Findings:
    """Where a stage says what is wrong before data are read.

    ``at`` is the parameter meant, dotted (``bands.alpha``), so that the message points at its
    line; empty for the step as a whole.
    """

    on_refuse: Callable[[str, str], None]
    on_warn: Callable[[str, str], None]

    def refuse(self, message: str, at: str = "") -> None:
        """Record an error: the recipe will not run. Folding goes on, to find all that is wrong."""
        self.on_refuse(message, at)

    def warn(self, message: str, at: str = "") -> None:
        """Record a warning: the recipe runs, and the user is told."""
        self.on_warn(message, at)


def check_band(
    low_hz: float, high_hz: float, given: SpectraSpec, findings: Findings, at: str
) -> None:
    """Find what is wrong with a frequency band on a spectrum: what every feature asks.

    Refuses a band that is empty, above the highest bin or outside what the filters pass (touching
    the edge is inside). Warns of a band narrower than the resolution, and of one that starts below
    one cycle per window.
    """
    if not 0 <= low_hz < high_hz:
        findings.refuse(f"the band {low_hz:g} to {high_hz:g} Hz is empty; low comes first", at)
        return
    if given.top_hz is not None and high_hz > given.top_hz:
        findings.refuse(
            f"the band ends at {high_hz:g} Hz, above the Nyquist frequency {given.top_hz:g} Hz", at
        )
    pass_low, pass_high = given.signal.pass_hz
    if pass_high is not None and high_hz > pass_high:
        findings.refuse(
            f"the band ends at {high_hz:g} Hz, but the filters before it pass only up to "
            f"{pass_high:g} Hz",
            at,
        )
    if pass_low is not None and low_hz < pass_low:
        findings.refuse(
            f"the band starts at {low_hz:g} Hz, but the filters before it pass only from "
            f"{pass_low:g} Hz",
            at,
        )
    if given.resolution_hz is not None and high_hz - low_hz < given.resolution_hz * (1 - 1e-9):
        findings.warn(
            f"the band is {high_hz - low_hz:g} Hz wide, narrower than the estimator's resolution "
            f"of {given.resolution_hz:g} Hz",
            at,
        )
    if low_hz > 0 and low_hz * given.window_s < 1 - 1e-9:
        findings.warn(
            f"the band starts at {low_hz:g} Hz, below one cycle in a window of {given.window_s:g} s"
            f" ({1 / given.window_s:g} Hz)",
            at,
        )
