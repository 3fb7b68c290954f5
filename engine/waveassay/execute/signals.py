"""Get a signal over any interval: from its file, or from what earlier tasks prepared."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np

from waveassay.contract import Floats, Signal, merged
from waveassay.contract.kinds import exclusions_within, place_of
from waveassay.execute.arrays import (
    ArrayFile,
    Group,
    exclusions_from_json,
    exclusions_to_json,
    fraction_of,
)
from waveassay.execute.store import Store
from waveassay.plan.pass_parts import overlapping
from waveassay.plan.passage import Passage
from waveassay.plan.precision import Held
from waveassay.plan.tasks import Task
from waveassay.recording import Digital, Facts, open_recording

FILE = "signals.arrays"
#: In a file's facts: lanes with samples outside the digital limits of their header.
OUTSIDE = "outside"

Window = tuple[Fraction, Fraction]
#: Samples as the file has them, and which of them.
Stored = tuple[Digital, int]


def read_from_file(
    passage: Passage, path: Path, facts: Facts, piece_no: int, windows: Mapping[int, Window]
) -> tuple[dict[int, Stored], set[int]]:
    """Read lanes from the recording, each over its own window, in one pass for equal windows.

    Returns where the samples of each are, and the lanes with samples outside the digital limits of
    their header.

    Parameters
    ----------
    windows : index of a lane -> (start, stop), s; the samples at or after start and before stop.
    """
    groups: dict[Window, list[int]] = {}
    for index, window in windows.items():
        groups.setdefault(window, []).append(index)
    read: dict[int, Stored] = {}
    with open_recording(path, facts=facts, truncated="read") as recording:
        for (start_s, stop_s), lanes in groups.items():
            channels = [passage.lanes[index].channel for index in lanes]
            digital = recording.read_digital(channels, piece_no, start_s, stop_s)
            read.update({index: (digital, place) for place, index in enumerate(lanes)})
        outside = {i for i in read if recording.out_of_range.get(passage.lanes[i].channel)}
    return read, outside


def as_held(signal: Signal, held: Held) -> Signal:
    """Return the signal with its samples held in a precision; itself where they are."""
    if signal.x.dtype == held:
        return signal
    return replace(signal, x=signal.x.astype(held))


def prepared_group(signal: Signal) -> Group:
    """Return a prepared signal as it is stored."""
    return Group(
        {"x": signal.x},
        {
            "rate_hz": str(signal.rate_hz),
            "start_s": str(signal.start_s),
            "unit": signal.unit,
            "samples": signal.x.size,
            "held": str(signal.x.dtype),
            "excluded": exclusions_to_json(signal.excluded),
        },
    )


class PreparedFiles:
    """Files of prepared signals in a store, with what is known of those used last.

    A process that prepares a stretch cuts its epochs, too: checking a file's digest once a process
    is enough.
    """

    _KEPT = 4
    _SOUND = 1000

    def __init__(self, store: Store) -> None:
        self._store = store
        self._sound: dict[str, None] = {}
        self._open: dict[str, ArrayFile] = {}

    def file(self, key: str) -> ArrayFile:
        """Return a result's file, checked against its digest unless it is known."""
        if key not in self._open:
            if key not in self._sound:
                self._store.read(key)
                self.know(key)
            self._open[key] = ArrayFile(self._store.place(key) / FILE)
            _drop(self._open, self._KEPT)
        return self._open[key]

    def know(self, key: str) -> None:
        """Note a result that was just written, or checked."""
        self._sound[key] = None
        _drop(self._sound, self._SOUND)


def _drop(known: dict[str, Any], most: int) -> None:
    """Drop what was noted first, beyond so many."""
    while len(known) > most:
        del known[next(iter(known))]


@dataclass
class SignalSource:
    """Signals of a passage over any interval of a piece, whatever holds them.

    Attributes
    ----------
    prepared : (pass, stretch number) -> the key of the result that holds it, within ``piece_no``.
    outside : lanes in which what was read has samples outside the digital limits.
    """

    passage: Passage
    path: Path
    facts: Facts
    files: PreparedFiles
    piece_no: int
    prepared: Mapping[tuple[int, int], str]
    outside: set[int] = field(default_factory=set)

    def by_lane(
        self, wanted: Sequence[Mapping[int, Window]]
    ) -> Iterator[tuple[int, dict[int, Signal]]]:
        """Yield each lane's number and signals, by step, each over its own window.

        Only one lane's signals are held as such: of many channels, the rest stays as it was read.

        Parameters
        ----------
        wanted : for each lane, number of a step -> window of what the step gives.
        """
        from_file: dict[int, Window] = {}
        for lane_no, windows in enumerate(wanted):
            for move_no, window in windows.items():
                if not self._is_prepared(lane_no, move_no):
                    from_file[lane_no] = self._within(window)
        read: dict[int, Stored] = {}
        if from_file:
            read, outside = read_from_file(
                self.passage, self.path, self.facts, self.piece_no, from_file
            )
            self.outside |= outside
        for lane_no, windows in enumerate(wanted):
            found: dict[int, Signal] = {}
            raw: Signal | None = None
            if lane_no in read:
                digital, place = read[lane_no]
                raw = self._raw(lane_no, from_file[lane_no][0], digital.physical(place))
            for move_no, window in windows.items():
                if raw is not None and not self._is_prepared(lane_no, move_no):
                    found[move_no] = raw
                else:
                    found[move_no] = self._assemble(lane_no, move_no, window)
            yield lane_no, found

    def _is_prepared(self, lane_no: int, move_no: int) -> bool:
        program = self.passage.lanes[lane_no].program
        pass_no = program.moves[move_no].pass_no
        return program.prepares(pass_no) and any(held == pass_no for held, _ in self.prepared)

    def _raw(self, lane_no: int, start_s: Fraction, x: Floats) -> Signal:
        """Return a lane as it was read, in the recipe's unit."""
        lane, piece = self.passage.lanes[lane_no], self.passage.pieces[self.piece_no]
        rate_hz = lane.spec.rate_hz
        assert rate_hz is not None, "a recording's rates are known"
        first = place_of(start_s, piece.start_s, rate_hz)
        return Signal(
            lane.signal,
            lane.spec.unit,
            rate_hz,
            piece.start_s + first / rate_hz,
            x if lane.scale == 1.0 else x * lane.scale,
            piece,
            conditions=self.passage.conditions,
        )

    def _assemble(self, lane_no: int, move_no: int, window: Window) -> Signal:
        """Return what earlier tasks prepared of a lane; of their files, only what is needed."""
        lane = self.passage.lanes[lane_no]
        pass_no = lane.program.moves[move_no].pass_no
        start_s, stop_s = self._within(window)
        name = f"{lane_no}.{move_no}"
        files = [
            self.files.file(self.prepared[pass_no, stretch.number])
            for stretch in overlapping(lane, self.piece_no, start_s, stop_s)
        ]
        for file in files:
            self.outside.update(file.facts[OUTSIDE])
        parts = [file.facts_of(name) for file in files]
        begun_s, rate_hz = fraction_of(parts[0]["start_s"]), fraction_of(parts[0]["rate_hz"])
        size = sum(part["samples"] for part in parts)
        first = min(max(0, place_of(start_s, begun_s, rate_hz)), size)
        last = min(max(first, place_of(stop_s, begun_s, rate_hz)), size)
        x: Floats = np.empty(last - first, parts[0]["held"])
        at = 0
        for file, part in zip(files, parts, strict=True):
            low, high = (min(max(0, i - at), part["samples"]) for i in (first, last))
            if low < high:
                file.fill(x[at + low - first : at + high - first], name, "x", low)
            at += part["samples"]
        excluded = merged(e for part in parts for e in exclusions_from_json(part["excluded"]))
        return Signal(
            lane.signal,
            parts[0]["unit"],
            rate_hz,
            begun_s + first / rate_hz,
            x,
            self.passage.pieces[self.piece_no],
            exclusions_within(excluded, start_s, stop_s),
            self.passage.conditions,
        )

    def _within(self, window: Window) -> Window:
        piece = self.passage.pieces[self.piece_no]
        return max(window[0], piece.start_s), min(window[1], piece.stop_s)


def prepared_keys(task: Task, by_key: Mapping[str, Task]) -> dict[tuple[int, int], str]:
    """Return where a task finds prepared stretches: (pass, stretch number) -> key."""
    return {
        (need.pass_no, need.stretch.number): key
        for key in task.needs
        if (need := by_key[key]).action == "prepare" and need.stretch is not None
    }
