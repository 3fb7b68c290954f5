"""The record clock: which records follow each other without a gap.

Two records belong together when the second starts, within a tolerance, one record duration after
the first. The tolerance is half a sample of the fastest signal, plus what rounding of the onsets
explains: onsets written with ``d`` decimals can only show a duration that needs more decimals as
one of its two neighbours in units of ``10**-d``. (A duration of 0.333333 s shows as 0.33 s and
0.34 s where onsets have two decimals; one of 1 s always shows as 1 s.) The steps are compared,
not their sum, so that a rounded duration in the header, which adds up to a drift, makes no gap.
Only where rounding of onsets is allowed for, their sum must stay within one unit of it too, for
rounding does not add up.
"""

from dataclasses import dataclass
from fractions import Fraction
from math import ceil, floor

from waveassay.recording.tal import TICK_DECIMALS, TICKS_PER_S, seconds

MAX_PIECES = 1_000_000
# A duration with fewer decimals is taken to be exact: the header has room for more.
_ROUNDED_DECIMALS = 3


class ClockError(Exception):
    """The record clock cannot be followed."""


@dataclass(frozen=True)
class ClockFindings:
    """What the clock showed.

    Attributes
    ----------
    pieces : (first record, start in ticks after the first record's) of each piece.
    drift_s : largest distance of a record's stated start from where its samples are put.
    drifts : whether that is more than half a sample of the fastest signal.
    backward : how many records start before the one before them ends; ``first_backward`` is the
        first of them.
    """

    pieces: tuple[tuple[int, int], ...]
    drift_s: Fraction
    drifts: bool
    backward: int
    first_backward: int


class RecordClock:
    """Joins records to pieces as their starts come in.

    Parameters
    ----------
    record_s : stated duration of a record.
    fastest_hz : rate of the fastest signal.
    decimals : with how many the onsets are taken to be written.
    may_overlap : whether a record that starts too early is only noted; otherwise it is an error.
    """

    def __init__(
        self, record_s: Fraction, fastest_hz: Fraction, decimals: int, may_overlap: bool
    ) -> None:
        self.decimals = decimals
        # Whole: the header's 8 characters hold at most 11 decimals of a time above a microsecond.
        self._record_ticks = int(record_s * TICKS_PER_S)
        unit = Fraction(TICKS_PER_S, 10**decimals)
        units = Fraction(self._record_ticks) / unit
        #: More decimals would not change what belongs together.
        self.resolved = units.denominator == 1
        half = TICKS_PER_S / (2 * fastest_hz)
        self._shortest = ceil(floor(units) * unit - half)
        self._longest = floor(ceil(units) * unit + half)
        self._half = floor(half)
        self._unit = floor(unit)
        # What rounding of the stated duration itself may add up to, per record.
        written = len(str(self._record_ticks)) - len(str(self._record_ticks).rstrip("0"))
        self._creep = 10**written // 2 if written <= TICK_DECIMALS - _ROUNDED_DECIMALS else 0
        self._may_overlap = may_overlap
        self._pieces: list[tuple[int, int]] = []
        self._zero = 0
        self._records = 0
        self._last = 0
        self._drift = 0
        self._backward = 0
        self._first_backward = 0

    def add(self, onset: int) -> None:
        """Take the next record's start, in ticks.

        Raises
        ------
        ClockError
            When the record starts before the one before it ends, or there are too many gaps.
        """
        record = self._records
        self._records += 1
        if record == 0:
            self._zero = self._last = onset
            self._pieces.append((0, 0))
            return
        step = onset - self._last
        self._last = onset
        start = onset - self._zero
        if step > self._longest or self._beyond_rounding(record, start):
            # Drift may have put the end of the piece before later than this record's own time.
            self._pieces.append((record, max(start, self._due(record))))
            if len(self._pieces) > MAX_PIECES:
                raise ClockError(f"the record clock jumps more than {MAX_PIECES} times")
        elif step < self._shortest:
            if not self._may_overlap:
                raise ClockError(
                    f"record {record + 1} starts {float(seconds(step)):.9g} s after record "
                    f"{record}, which lasts {float(self._record_ticks / TICKS_PER_S):.9g} s: the "
                    "record clock runs backwards or records overlap"
                )
            if self._backward == 0:
                self._first_backward = record
            self._backward += 1
        self._drift = max(self._drift, abs(start - self._due(record)))

    def findings(self) -> ClockFindings:
        """Return what the clock showed."""
        return ClockFindings(
            pieces=tuple(self._pieces),
            drift_s=seconds(self._drift),
            drifts=self._drift > self._half,
            backward=self._backward,
            first_backward=self._first_backward,
        )

    def _beyond_rounding(self, record: int, start: int) -> bool:
        if self.resolved:
            return False
        since = record - self._pieces[-1][0]
        return start - self._due(record) > self._unit + self._half + since * self._creep

    def _due(self, record: int) -> int:
        """Return where the record's samples are put if it belongs to the last piece, ticks."""
        first, start = self._pieces[-1]
        return start + (record - first) * self._record_ticks
