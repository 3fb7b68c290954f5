"""The data that flow between steps. Each object concerns one signal of one recording.

Times are exact fractions of a second from the recording's start. Arrays are read-only: a stage
never writes its input, it returns a new object (``dataclasses.replace`` or the helpers here).

Numbers are float64, with two exceptions. Steps on samples (filters, masks) are given samples in
float64 and give them so; the samples of epochs may be float32, as the recipe's ``precision`` has
it. Densities of float32 samples may be float32 or float64; those of float64 samples are float64.
"""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from enum import StrEnum
from fractions import Fraction
from functools import cached_property
from itertools import compress, pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

#: float64, or, where the text says so, float32.
Floats = NDArray[np.floating[Any]]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

# Whole numbers below this are floats, and a quotient of two floats is rounded once.
_EXACT = 1 << 53


class Kind(StrEnum):
    """What a step takes or gives."""

    SIGNALS = "signals"
    EPOCHS = "epochs"
    SPECTRA = "spectra"
    AVERAGES = "averages"  # spectra averaged over the epochs of a condition
    FEATURES = "features"
    AVERAGE_FEATURES = "average features"  # features of averaged spectra
    TABLE = "table"
    FIGURE = "figure"


def _freeze(*arrays: NDArray[Any]) -> None:
    for array in arrays:
        array.flags.writeable = False


def place_of(time_s: Fraction, origin_s: Fraction, rate_hz: Fraction) -> int:
    """Return ``ceil((time - origin) * rate)`` in whole numbers: `Fraction` reduces at each step."""
    behind = origin_s.numerator * time_s.denominator - time_s.numerator * origin_s.denominator
    each = time_s.denominator * origin_s.denominator * rate_hz.denominator
    return -(behind * rate_hz.numerator // each)


@dataclass(frozen=True, order=True)
class Interval:
    """A stretch of time, start included and stop not."""

    start_s: Fraction
    stop_s: Fraction

    @property
    def length_s(self) -> Fraction:
        """Length, s; never negative."""
        return max(Fraction(0), self.stop_s - self.start_s)

    def overlaps(self, other: "Interval") -> bool:
        """Tell whether the two share any time."""
        return self.start_s < other.stop_s and other.start_s < self.stop_s

    def contains(self, other: "Interval") -> bool:
        """Tell whether the other lies in this one entirely."""
        return self.start_s <= other.start_s and other.stop_s <= self.stop_s


@dataclass(frozen=True, order=True)
class Exclusion(Interval):
    """Masked time with its reason. A mask changes no sample."""

    reason: str


@dataclass(frozen=True, order=True)
class Condition(Interval):
    """A named stretch of time."""

    name: str


def merged(exclusions: Iterable[Exclusion]) -> tuple[Exclusion, ...]:
    """Join touching exclusions of one reason; sorted by start, then stop, then reason."""
    items = [item for item in exclusions if item.start_s < item.stop_s]
    if all(a.reason == b.reason and a.stop_s < b.start_s for a, b in pairwise(items)):
        return tuple(items)  # as they mostly are
    by_reason: dict[str, list[Exclusion]] = {}
    for item in sorted(items, key=lambda e: (e.reason, e.start_s, e.stop_s)):
        known = by_reason.setdefault(item.reason, [])
        if known and item.start_s <= known[-1].stop_s:
            last = known.pop()
            item = Exclusion(last.start_s, max(last.stop_s, item.stop_s), item.reason)
        known.append(item)
    return tuple(sorted(item for items in by_reason.values() for item in items))


def exclusions_within(
    exclusions: Iterable[Exclusion], start_s: Fraction, stop_s: Fraction
) -> tuple[Exclusion, ...]:
    """Return what of exclusions lies between two times."""
    return merged(
        Exclusion(max(start_s, e.start_s), min(stop_s, e.stop_s), e.reason)
        for e in exclusions
        if e.start_s < stop_s and start_s < e.stop_s
    )


@dataclass(frozen=True)
class Signal:
    """A signal over a stretch of one piece (a part of a recording without gaps).

    Attributes
    ----------
    name : the recipe's name of the signal, or its label where one name stands for many.
    x : samples in ``unit``, shape (n,); float64, or float32 in epochs.
    rate_hz : exact sampling rate.
    start_s : time of ``x[0]``.
    piece : the whole piece; ``x`` may be a part of it, with context on either side.
    excluded : masked time, sorted; may reach beyond ``x``.
    conditions : the recording's conditions.
    """

    name: str
    unit: str
    rate_hz: Fraction
    start_s: Fraction
    x: Floats
    piece: Interval
    excluded: tuple[Exclusion, ...] = ()
    conditions: tuple[Condition, ...] = ()

    def __post_init__(self) -> None:
        _freeze(self.x)

    @property
    def stop_s(self) -> Fraction:
        """Time just after the last sample."""
        return self.start_s + self.x.size / self.rate_hz

    def time_s(self, index: int) -> Fraction:
        """Return the exact time of sample ``index`` of ``x``."""
        return self.start_s + index / self.rate_hz

    def index_at(self, time_s: Fraction) -> int:
        """Return the index of the first sample at or after a time, not clipped to ``x``."""
        return place_of(time_s, self.start_s, self.rate_hz)

    def with_samples(
        self, x: Floats, *, rate_hz: Fraction | None = None, unit: str | None = None
    ) -> "Signal":
        """Return the signal with other samples from the same start, in float64.

        Raises
        ------
        TypeError
            When the samples are complex.
        """
        if np.iscomplexobj(x):
            raise TypeError("samples are real numbers; take the real part or the magnitude")
        return replace(
            self,
            x=np.asarray(x, np.float64),
            rate_hz=self.rate_hz if rate_hz is None else rate_hz,
            unit=self.unit if unit is None else unit,
        )

    def masked(self, ignoring: Iterable[str] = ()) -> Bools:
        """Tell which samples lie in masked time, shape (n,); some reasons may be ignored."""
        ignored = set(ignoring)
        found = np.zeros(self.x.size, np.bool_)
        for item in self.excluded:
            if item.reason not in ignored:
                first, last = (max(0, self.index_at(t)) for t in (item.start_s, item.stop_s))
                found[first:last] = True
        return found

    def excluding(self, more: Iterable[Exclusion]) -> "Signal":
        """Return the signal with more time masked."""
        return replace(self, excluded=merged((*self.excluded, *more)))

    def widened(self, before_s: Fraction, after_s: Fraction) -> "Signal":
        """Return the signal with every exclusion widened: what a filter does to a mask.

        ``before_s`` is how far ahead of masked time its effect is felt, ``after_s`` how far behind.
        """
        wide = (
            Exclusion(
                max(self.piece.start_s, e.start_s - before_s),
                min(self.piece.stop_s, e.stop_s + after_s),
                e.reason,
            )
            for e in self.excluded
        )
        return replace(self, excluded=merged(wide))

    def excluding_edges(self, before_s: Fraction, after_s: Fraction) -> "Signal":
        """Mask the two ends of the piece, with reason ``edge``.

        ``after_s`` is masked behind the piece's start, ``before_s`` ahead of its stop.
        """
        start, stop = self.piece.start_s, self.piece.stop_s
        return self.excluding(
            (
                Exclusion(start, min(stop, start + after_s), "edge"),
                Exclusion(max(start, stop - before_s), stop, "edge"),
            )
        )

    def cut(self, start_s: Fraction, stop_s: Fraction) -> "Signal":
        """Return the samples at or after ``start_s`` and before ``stop_s``, masks cut alike."""
        first = min(max(0, self.index_at(start_s)), self.x.size)
        last = min(max(first, self.index_at(stop_s)), self.x.size)
        return replace(
            self,
            x=self.x[first:last],
            start_s=self.time_s(first),
            excluded=exclusions_within(self.excluded, start_s, stop_s),
        )


def exclusions_of(signal: Signal, where: Bools, reason: str) -> tuple[Exclusion, ...]:
    """Return the time of marked samples, for `Signal.excluding`; a run of them is one exclusion.

    A sample takes the time from its own to the next one's. ``where`` has one mark a sample.

    Raises
    ------
    ValueError
        When there are more or fewer marks than samples.
    """
    if where.shape != signal.x.shape:
        raise ValueError(f"{signal.x.size} samples need as many marks, not {where.shape}")
    edges = np.flatnonzero(np.diff(where.astype(np.int8), prepend=0, append=0))
    return tuple(
        Exclusion(signal.time_s(start), signal.time_s(stop), reason)
        for start, stop in edges.reshape(-1, 2).tolist()
    )


@dataclass(frozen=True)
class Rows:
    """What the rows of a table are about: epochs, or conditions after averaging.

    Every attribute has one entry a row. ``epochs`` is how many epochs a row stands for.
    """

    start_s: Floats
    duration_s: Floats
    condition: tuple[str, ...]
    kept: Bools
    reason: tuple[str, ...]
    epochs: Ints

    def __post_init__(self) -> None:
        _freeze(self.start_s, self.duration_s, self.kept, self.epochs)

    def __len__(self) -> int:
        return len(self.condition)


@dataclass(frozen=True)
class Epochs:
    """Equal lengths of one signal, as places in it: a view, not a copy.

    Attributes
    ----------
    length : samples an epoch.
    first : index in ``signal.x`` of each epoch's first sample, rising within a condition.
    condition, kept, reason : one entry an epoch; ``reason`` is empty where kept.
    """

    signal: Signal
    length: int
    first: Ints
    condition: tuple[str, ...]
    kept: Bools
    reason: tuple[str, ...]

    def __post_init__(self) -> None:
        _freeze(self.first, self.kept)

    def __len__(self) -> int:
        return int(self.first.size)

    def samples(self) -> Floats:
        """Return the kept epochs, shape (kept, length); a copy only of what is kept.

        They are float64 or float32, as the signal's samples are.
        """
        if self.signal.x.size < self.length:
            return np.empty((0, self.length), self.signal.x.dtype)
        windows = np.lib.stride_tricks.sliding_window_view(self.signal.x, self.length)
        return windows[self.first[self.kept]]

    @cached_property
    def rows(self) -> Rows:
        """What each epoch's row says of it."""
        signal, count = self.signal, len(self)
        # Exact integers over one denominator, rounded once: a Fraction an epoch is far slower.
        start, rate = signal.start_s, signal.rate_hz
        begin = start.numerator * rate.numerator
        each = start.denominator * rate.denominator
        whole = start.denominator * rate.numerator
        last = int(np.max(np.abs(self.first), initial=0))
        if max(abs(begin) + last * each, whole) < _EXACT:  # as floats they are the same numbers
            starts = (begin + self.first * each) / whole
        else:
            starts = np.array([(begin + i * each) / whole for i in self.first.tolist()], np.float64)
        return Rows(
            start_s=starts,
            duration_s=np.full(count, float(self.length / signal.rate_hz)),
            condition=self.condition,
            kept=self.kept,
            reason=self.reason,
            epochs=np.ones(count, np.int64),
        )

    def starting_in(self, start_s: Fraction, stop_s: Fraction) -> "Epochs":
        """Return the epochs that start at or after ``start_s`` and before ``stop_s``."""
        low, high = self.signal.index_at(start_s), self.signal.index_at(stop_s)
        inside = (self.first >= low) & (self.first < high)
        if np.all(inside):
            return self
        chosen = inside.tolist()
        return replace(
            self,
            first=self.first[inside],
            condition=tuple(compress(self.condition, chosen)),
            kept=self.kept[inside],
            reason=tuple(compress(self.reason, chosen)),
        )


@dataclass(frozen=True)
class Spectra:
    """Spectral densities, one a row: of epochs, or averaged by condition.

    Attributes
    ----------
    unit : the signal's unit; densities are in unit squared per Hz.
    freq_hz : bin centres, shape (f,), equally spaced from 0.
    density : one-sided, shape (rows, f); NaN in rows that are not kept. float64, or float32 where
        the samples were.
    resolution_hz : true resolution (equivalent noise bandwidth, or 2W of a multitaper estimate).
    dof : equivalent degrees of freedom of each row, shape (rows,).
    """

    signal: str
    unit: str
    rows: Rows
    freq_hz: Floats
    density: Floats
    resolution_hz: float
    dof: Floats

    def __post_init__(self) -> None:
        _freeze(self.freq_hz, self.density, self.dof)

    @property
    def bin_hz(self) -> float:
        """Spacing of the bins, which zero padding narrows and which is no resolution."""
        return float(self.freq_hz[1] - self.freq_hz[0])


@dataclass(frozen=True)
class Features:
    """Numbers of each row.

    Attributes
    ----------
    columns : part -> one value a row, NaN where missing. Parts and order as in the spec;
        the empty part stands for the feature itself. Held in float64, whatever they come in.
    missing : why a kept row has no value, one text a row, empty where all are there.
    """

    signal: str
    rows: Rows
    columns: Mapping[str, Floats]
    missing: tuple[str, ...]

    def __post_init__(self) -> None:
        columns = {
            part: values.astype(np.float64) if values.dtype == np.float32 else values
            for part, values in self.columns.items()
        }
        object.__setattr__(self, "columns", columns)
        _freeze(*columns.values())


@dataclass(frozen=True)
class Table:
    """What `export.table` asks for; the engine writes it."""

    csv: str
    comment: str = ""


@dataclass(frozen=True)
class Figure:
    """One picture, drawn; the engine writes it.

    Attributes
    ----------
    signal : whose picture it is.
    show : what is shown; part of the file's name.
    png : the file's bytes.
    caption : one or two sentences that name units, reference and settings.
    """

    signal: str
    show: str
    png: bytes = field(repr=False)
    caption: str


Data = Signal | Epochs | Spectra | Features | Table | Figure
