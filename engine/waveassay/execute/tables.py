"""The rows of a passage's tables, as Arrow tables and plain rows."""

from bisect import bisect_right
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise
from math import lcm
from typing import TYPE_CHECKING, Any

import numpy as np

from waveassay.contract import (
    Condition,
    Exclusion,
    Floats,
    Interval,
    Ints,
    Spectra,
)
from waveassay.execute.stored_features import CodedTexts, StoredFeatures, StoredRows
from waveassay.plan.columns import FeatureColumn

if TYPE_CHECKING:
    import pyarrow as pa

EPOCH_COLUMNS = (
    "recording",
    "signal",
    "signal_2",
    "condition",
    "epoch",
    "start_s",
    "duration_s",
    "kept",
    "reason",
)
AVERAGE_COLUMNS = (
    "recording",
    "signal",
    "signal_2",
    "condition",
    "epochs",
    "start_s",
    "duration_s",
    "kept",
    "reason",
)


@dataclass(frozen=True)
class Block:
    """Rows of one signal that belong together: features of the same epochs, by step."""

    signal: str
    features: Mapping[int, StoredFeatures]

    @property
    def rows(self) -> StoredRows:
        """What the rows say; the last step decides, since it has been through every rejection."""
        return self.features[max(self.features)].rows

    def column(self, wanted: FeatureColumn) -> Floats:
        """Return one column, NaN where this block has none."""
        features = self.features.get(wanted.step_index)
        if features is None or wanted.part not in features.columns:
            return np.full(len(self.rows), np.nan)
        return features.columns[wanted.part]


class TableOfFeatures:
    """A wide table, made signal by signal: one row an epoch (or condition), one column a feature.

    Rows of a signal are sorted by condition, in the order in which conditions begin, then by time.
    """

    def __init__(
        self,
        recording: str,
        columns: Sequence[FeatureColumn],
        conditions: Sequence[Condition],
        averaged: bool,
    ) -> None:
        import pyarrow as pa

        self.recording, self.columns, self.averaged = recording, columns, averaged
        names = dict.fromkeys(condition.name for condition in conditions)
        self._rank = {name: place for place, name in enumerate(names)}
        kinds: dict[str, Any] = {
            "epoch": pa.int64(),
            "epochs": pa.int64(),
            "start_s": pa.float64(),
            "duration_s": pa.float64(),
            "kept": pa.bool_(),
        }
        first = AVERAGE_COLUMNS if averaged else EPOCH_COLUMNS
        fields = [(name, kinds.get(name, pa.string())) for name in first]
        fields += [(column.name, pa.float64()) for column in columns]
        fields.append(("missing_reason", pa.string()))
        every = [name for name, _ in fields]
        assert len(set(every)) == len(every), f"columns have distinct names ({every})"
        self.schema: pa.Schema = pa.schema(fields)

    def of(self, block: Block) -> "pa.Table":
        """Return the rows of one block."""
        import pyarrow as pa

        rows, last = block.rows, len(self._rank)
        condition = rows.condition
        ranks = [self._rank.get(name, last) for name in condition.known]
        rank = np.array(ranks, np.int64)[condition.codes]
        order = np.lexsort((rows.start_s, rank))
        count = order.size
        values: dict[str, Any] = {
            "recording": pa.repeat(self.recording, count),
            "signal": pa.repeat(block.signal, count),
            "signal_2": pa.nulls(count, pa.string()),
            "condition": _texts(condition, order),
            "start_s": rows.start_s[order],
            "duration_s": rows.duration_s[order],
            "kept": rows.kept[order],
            "reason": _texts(rows.reason, order),
            "missing_reason": _texts(_missing(block, self.columns), order),
        }
        if self.averaged:
            values["epochs"] = rows.epochs[order]
        else:
            sorted_rank = rank[order]
            begun = np.searchsorted(sorted_rank, np.arange(last + 1), side="left")
            values["epoch"] = np.arange(count) - begun[sorted_rank]
        values |= {column.name: block.column(column)[order] for column in self.columns}
        # Copied, not lent: numpy's memory would stay in pieces until the table is written.
        arrays = [pa.array(values[f.name], f.type, from_pandas=True) for f in self.schema]
        return pa.Table.from_arrays(arrays, schema=self.schema)


def _texts(texts: CodedTexts, order: Ints) -> Any:
    """Return texts in an order; an empty one is missing."""
    import pyarrow as pa

    if not any(texts.known):
        return pa.nulls(order.size, pa.string())
    dictionary = pa.array([text or None for text in texts.known], pa.string())
    return pa.DictionaryArray.from_arrays(texts.codes[order], dictionary).cast(pa.string())


def _missing(block: Block, columns: Sequence[FeatureColumn]) -> CodedTexts:
    """Return why features are missing, of all steps together."""
    found = CodedTexts(("",), np.zeros(len(block.rows), np.int32))
    for step_index, feature in dict.fromkeys((c.step_index, c.name.split(".")[0]) for c in columns):
        features = block.features.get(step_index)
        if features is not None and features.missing is not None:
            found = _both(found, features.missing, feature)
    return found


def _both(before: CodedTexts, more: CodedTexts, feature: str) -> CodedTexts:
    """Return texts with those of one more feature behind them."""
    pairs, codes = np.unique(
        before.codes.astype(np.int64) * len(more.known) + more.codes, return_inverse=True
    )
    known = []
    for one, other in (divmod(pair, len(more.known)) for pair in pairs.tolist()):
        said = [before.known[one]] if before.known[one] else []
        if more.known[other]:
            said.append(f"{feature}: {more.known[other]}")
        known.append("; ".join(said))
    return CodedTexts(tuple(known), codes.astype(np.int32))


def summary_rows(
    recording: str,
    chain: str,
    blocks: Sequence[Block],
    columns: Sequence[FeatureColumn],
    units: Mapping[tuple[str, str], str],
    conditions: Sequence[Condition],
) -> Iterator[list[Any]]:
    """Yield one row a signal, condition and feature, over kept epochs that have a value.

    The standard deviation divides by n - 1; quantiles are interpolated linearly between order
    statistics (type 7 of Hyndman and Fan, The American Statistician 50:361-365, 1996).
    """
    for block in blocks:
        known = [column for column in columns if column.step_index in block.features]
        for condition in dict.fromkeys(c.name for c in conditions):
            inside = block.rows.condition.are(condition) & block.rows.kept
            values = np.array([block.column(column)[inside] for column in known])
            for column, statistics in zip(known, _statistics(values), strict=True):
                unit = units.get((block.signal, column.name), column.unit)
                place = [recording, chain, block.signal, None, condition, column.name, unit]
                yield [*place, *statistics]


def _statistics(values: Floats) -> list[list[Any]]:
    """Return n, mean, sd and quartiles of each row's finite values."""
    complete = np.all(np.isfinite(values), axis=-1)
    if np.all(complete) and values.shape[-1] > 1:  # all rows at once
        quartiles = np.quantile(values, [0.5, 0.25, 0.75], axis=-1)
        parts = (np.mean(values, axis=-1), np.std(values, axis=-1, ddof=1), *quartiles)
        return [[values.shape[-1], *row] for row in np.array(parts).T.tolist()]
    return [_of_one(row[np.isfinite(row)]) for row in values]


def _of_one(values: Floats) -> list[Any]:
    if not values.size:
        return [0, None, None, None, None, None]
    if values.size == 1:
        return [1, float(values[0]), None, *[float(values[0])] * 3]
    return _statistics(values[None, :])[0]


def excluded_rows(
    recording: str,
    chain: str,
    signal: str,
    masks: Sequence[Exclusion],
    pieces: Sequence[Interval],
    conditions: Sequence[Condition],
) -> Iterator[list[Any]]:
    """Yield one row a condition and reason: masked time, gaps, and all of it together (``any``)."""
    gaps = [Exclusion(before.stop_s, after.start_s, "gap") for before, after in pairwise(pieces)]
    everything = (*masks, *gaps)
    ticks = lcm(
        *(t.denominator for item in (*everything, *conditions) for t in (item.start_s, item.stop_s))
    )
    by_reason: dict[str, list[_Ticks]] = {}
    for item in everything:
        by_reason.setdefault(item.reason, []).append(_in_ticks(item, ticks))
    together = [span for spans in by_reason.values() for span in spans]
    excluded = [(reason, _joined(spans)) for reason, spans in sorted(by_reason.items())]
    excluded.append(("any", _joined(together)))
    for name in dict.fromkeys(c.name for c in conditions):
        windows = [_in_ticks(c, ticks) for c in conditions if c.name == name]
        total = sum(stop - start for start, stop in windows)
        for reason, spans in excluded:
            shared = _overlap(spans, windows)
            if shared or reason == "any":
                share = float(Fraction(shared, total)) if total else None
                excluded_s = float(Fraction(shared, ticks))
                yield [recording, chain, signal, name, reason, excluded_s, share]


#: Start and stop in whole parts of a second: sums of fractions would reduce at every step.
_Ticks = tuple[int, int]


def _in_ticks(item: Interval, ticks: int) -> _Ticks:
    start_s, stop_s = item.start_s, item.stop_s
    return (
        start_s.numerator * (ticks // start_s.denominator),
        stop_s.numerator * (ticks // stop_s.denominator),
    )


def _joined(spans: Iterable[_Ticks]) -> list[_Ticks]:
    """Join spans that touch or overlap; sorted."""
    joined: list[_Ticks] = []
    for start, stop in sorted(spans):
        if joined and start <= joined[-1][1]:
            joined[-1] = (joined[-1][0], max(joined[-1][1], stop))
        else:
            joined.append((start, stop))
    return joined


def _overlap(masks: Sequence[_Ticks], windows: Sequence[_Ticks]) -> int:
    """Return the time that windows share with masks, which are sorted and do not overlap."""
    stops = [stop for _, stop in masks]
    shared = 0
    for start, stop in windows:
        for mask_start, mask_stop in masks[bisect_right(stops, start) :]:
            if mask_start >= stop:
                break
            shared += min(mask_stop, stop) - max(mask_start, start)
    return shared


def spectra_table(recording: str, averages: Sequence[tuple[str, Spectra]]) -> "pa.Table":
    """Return averaged spectra, long: one row a signal, condition and frequency."""
    import pyarrow as pa

    names = (
        "recording",
        "signal",
        "condition",
        "step",
        "epochs",
        "dof",
        "frequency_hz",
        "density",
        "unit",
    )
    kinds = [pa.string()] * 4 + [pa.int64()] + [pa.float64()] * 3 + [pa.string()]
    columns: list[list[Any]] = [[] for _ in names]
    for step, spectra in averages:
        for place, condition in enumerate(spectra.rows.condition):
            count = spectra.freq_hz.size
            values: list[list[Any]] = [
                [recording] * count,
                [spectra.signal] * count,
                [condition] * count,
                [step] * count,
                [int(spectra.rows.epochs[place])] * count,
                [float(spectra.dof[place])] * count,
                spectra.freq_hz.tolist(),
                spectra.density[place].tolist(),
                [f"{spectra.unit}^2/Hz"] * count,
            ]
            for column, more in zip(columns, values, strict=True):
                column.extend(more)
    arrays = [
        pa.array(column, kind, from_pandas=kind == pa.float64())
        for column, kind in zip(columns, kinds, strict=True)
    ]
    return pa.table(dict(zip(names, arrays, strict=True)))
