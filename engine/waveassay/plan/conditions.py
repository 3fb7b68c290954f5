"""Find the conditions of a recording: named stretches of time, set by annotations or by clock.

The rules, in one place:

- An annotation is matched whole; case and outer spaces are ignored.
- ``which: first`` of a start is the first in the file; of an end, the first after the start.
  ``which: last`` is the last in the file.
- ``which: each`` makes one condition of every start. Each goes with the next end after it, which
  must come before the next start begins; a start without an end, or an end without a start, is an
  error. With ``length`` each start stands for itself.
- Pairs are formed on the annotations' own times; offsets are added afterwards.
- A time of day is the first at or after the recording's start, across midnight if need be.
- A condition must lie in the recording. Only up to `CLIPPED_S` may stand out, and is cut off: files
  hold whole records, most often of a second, and lose a part of the last.
"""

from bisect import bisect_right
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from difflib import get_close_matches
from fractions import Fraction
from itertools import pairwise

from waveassay.contract import Condition, SignalError, exact
from waveassay.recipe.model import Anchor, ConditionRule
from waveassay.recording.facts import Annotation

#: How much of a condition may stand out of the recording, s; common practice, no source.
CLIPPED_S = Fraction(1)
_DAY_S = 86_400
_SHOWN = 12
_EACH_END = (
    "condition {name}: its end says which: each, but its start does not; say it of the start"
)


def resolve_conditions(
    rules: Mapping[str, ConditionRule],
    annotations: Sequence[Annotation],
    start: datetime | None,
    duration_s: Fraction,
) -> tuple[Condition, ...]:
    """Return the conditions of one recording, in the recipe's order, then in order of time.

    Without rules the whole recording is one condition, ``all``.

    Parameters
    ----------
    start : date and time of the first sample; None where the file does not state it.
    duration_s : time from the first sample to the end of the last one, gaps included.

    Raises
    ------
    SignalError
        When an annotation is missing, or ambiguous; when starts and ends do not pair; when a
        condition is empty, reversed or outside the recording. All that is wrong is said at once.
    """
    if not rules:
        return (Condition(Fraction(0), duration_s, "all"),)
    notes = _Notes(annotations)
    found: list[Condition] = []
    problems: list[str] = []
    for name, rule in rules.items():
        try:
            spans = sorted(_spans(name, rule, notes, start, duration_s))
            _require_apart(name, spans)
            found.extend(_inside(name, *span, duration_s) for span in spans)
        except _Unresolved as problem:
            problems.append(str(problem))
    if problems:
        raise SignalError("; ".join(problems))
    return tuple(found)


class _Unresolved(Exception):
    """One condition cannot be found."""


@dataclass(frozen=True)
class _Notes:
    """The file's annotations, looked up by their text."""

    annotations: Sequence[Annotation]

    def times_s(self, text: str) -> list[Fraction]:
        key = _key(text)
        return sorted(a.onset_s for a in self.annotations if _key(a.text) == key)

    def told(self, text: str) -> str:
        """Say what stands in the file, what is nearest to the text first."""
        if not self.annotations:
            return "the file has no annotations"
        counts: dict[str, int] = {}
        for item in self.annotations:
            counts[item.text.strip()] = counts.get(item.text.strip(), 0) + 1
        by_key = {_key(t): t for t in reversed(counts)}
        near = [by_key[k] for k in get_close_matches(_key(text), by_key, n=3, cutoff=0.5)]
        shown = [f"'{t}'" if counts[t] == 1 else f"'{t}' ({counts[t]} times)" for t in counts]
        more = f" and {len(shown) - _SHOWN} more" if len(shown) > _SHOWN else ""
        nearest = f", nearest {', '.join(map(repr, near))}" if near else ""
        return f"the file has {', '.join(shown[:_SHOWN])}{more}{nearest}"


def _key(text: str) -> str:
    return text.strip().casefold()


def _spans(
    name: str, rule: ConditionRule, notes: _Notes, start: datetime | None, duration_s: Fraction
) -> Iterable[tuple[Fraction, Fraction]]:
    """Yield start and stop of each condition that a rule makes, offsets included."""
    length_s = None if rule.length is None else exact(rule.length)
    if rule.end is not None and length_s is not None:
        raise _Unresolved(f"condition {name} has both end and length; leave one out")
    if rule.start is not None and rule.end is not None:
        begin, end = exact(rule.start.offset), exact(rule.end.offset)
        for first_s, last_s in _pairs(name, rule.start, rule.end, notes, start):
            yield first_s + begin, last_s + end
    elif rule.end is not None:
        if rule.end.which == "each":
            raise _Unresolved(_EACH_END.format(name=name))
        (last_s,) = _moments(name, "end", rule.end, notes, start)
        yield Fraction(0), last_s + exact(rule.end.offset)
    else:
        moments = [Fraction(0)]
        if rule.start is not None:
            offset = exact(rule.start.offset)
            moments = [t + offset for t in _moments(name, "start", rule.start, notes, start)]
            if rule.start.which == "each" and length_s is None and len(moments) > 1:
                raise _Unresolved(
                    f"condition {name}: which: each needs an end that is an annotation, or a length"
                )
        for first_s in moments:
            yield first_s, duration_s if length_s is None else first_s + length_s


def _pairs(
    name: str, first: Anchor, last: Anchor, notes: _Notes, start: datetime | None
) -> list[tuple[Fraction, Fraction]]:
    """Return starts with their ends, before offsets."""
    if first.which != "each":
        if last.which == "each":
            raise _Unresolved(_EACH_END.format(name=name))
        begin_s = _moments(name, "start", first, notes, start)[0]
        return [(begin_s, _moments(name, "end", last, notes, start, after_s=begin_s)[0])]
    starts = _moments(name, "start", first, notes, start)
    if last.annotation is None:
        raise _Unresolved(
            f"condition {name}: which: each needs an end that is an annotation, or a length"
        )
    if last.which in ("first", "last"):
        raise _Unresolved(
            f"condition {name}: its start says which: each, so every end goes with a start; leave "
            f"which: {last.which} out of its end"
        )
    if _key(last.annotation) == _key(first.annotation or ""):
        raise _Unresolved(
            f"condition {name}: start and end are the same annotation, so each cannot pair them; "
            "give a length instead of the end"
        )
    return _paired(name, first.annotation or "", starts, last.annotation, notes)


def _paired(
    name: str, first: str, starts: list[Fraction], last: str, notes: _Notes
) -> list[tuple[Fraction, Fraction]]:
    """Pair every start with the next end; each end is used once, and none is left over."""
    ends = notes.times_s(last)
    if not ends:
        raise _Unresolved(_not_there(name, "end", last, notes))
    pairs = []
    for number, begin_s in enumerate(starts):
        index = bisect_right(ends, begin_s)
        next_s = starts[number + 1] if number + 1 < len(starts) else None
        if index == len(ends) or (next_s is not None and ends[index] > next_s):
            until = "the file ends" if next_s is None else f"the next at {_time(next_s)}"
            raise _Unresolved(
                f"condition {name}: '{first}' at {_time(begin_s)} has no '{last}' before {until}; "
                "with which: each they must come in turn"
            )
        pairs.append((begin_s, ends[index]))
    used = {end_s for _, end_s in pairs}
    counts = Counter(ends)
    for end_s in ends:
        if end_s not in used or counts[end_s] > 1:
            raise _Unresolved(
                f"condition {name}: '{last}' at {_time(end_s)} ends nothing that '{first}' has "
                "started; with which: each they must come in turn"
            )
    return pairs


def _moments(
    name: str,
    edge: str,
    anchor: Anchor,
    notes: _Notes,
    start: datetime | None,
    after_s: Fraction | None = None,
) -> list[Fraction]:
    """Return the moments that an anchor means, before its offset; more than one only for each."""
    given = [anchor.annotation, anchor.time, anchor.clock]
    if sum(value is not None for value in given) != 1:
        raise _Unresolved(f"condition {name}: its {edge} needs one of annotation, time and clock")
    if anchor.time is not None:
        return [exact(anchor.time)]
    if anchor.clock is not None:
        return [_clock_s(name, edge, anchor.clock, start)]
    text = anchor.annotation or ""
    times = notes.times_s(text)
    if not times:
        raise _Unresolved(_not_there(name, edge, text, notes))
    if anchor.which == "each":
        return times
    if anchor.which == "last":
        return times[-1:]
    if anchor.which == "first":
        return _first(name, edge, text, times, after_s)
    if len(times) > 1:
        at = ", ".join(_time(t) for t in times[:_SHOWN]) + (" ..." if len(times) > _SHOWN else "")
        raise _Unresolved(
            f"condition {name}: its {edge}, annotation '{text}', stands {len(times)} times in the "
            f"file, at {at}; say which: first, last or each"
        )
    return times


def _first(
    name: str, edge: str, text: str, times: list[Fraction], after_s: Fraction | None
) -> list[Fraction]:
    later = [t for t in times if after_s is None or t > after_s]
    if not later:
        raise _Unresolved(
            f"condition {name}: its {edge}, annotation '{text}', stands only before its start at "
            f"{_time(after_s or Fraction(0))}: at {', '.join(_time(t) for t in times[:_SHOWN])}"
        )
    return later[:1]


def _not_there(name: str, edge: str, text: str, notes: _Notes) -> str:
    return (
        f"condition {name}: its {edge}, annotation '{text}', is not in the file; "
        f"{notes.told(text)}; write it in the recipe as the file has it"
    )


def _clock_s(name: str, edge: str, text: str, start: datetime | None) -> Fraction:
    """Return the first such time of day at or after the start, s from it."""
    if start is None:
        raise _Unresolved(
            f"condition {name}: its {edge} is the time of day {text}, but the file states no start "
            "time; use time or annotation"
        )
    parts = [Fraction(part) for part in text.split(":")]
    hours, minutes, seconds = (*parts, Fraction(0))[:3]
    of_day = hours * 3600 + minutes * 60 + seconds
    begun = start.hour * 3600 + start.minute * 60 + start.second
    return (of_day - begun - Fraction(start.microsecond, 1_000_000)) % _DAY_S


def _require_apart(name: str, spans: Sequence[tuple[Fraction, Fraction]]) -> None:
    """Refuse stretches of one condition that overlap: their epochs would be counted twice."""
    for (first_s, stop_s), (next_s, _) in pairwise(spans):
        if next_s < stop_s:
            raise _Unresolved(
                f"condition {name}: the stretch from {_time(first_s)} to {_time(stop_s)} overlaps "
                f"the next, from {_time(next_s)}; make its length shorter"
            )


def _inside(name: str, start_s: Fraction, stop_s: Fraction, duration_s: Fraction) -> Condition:
    """Return the condition, cut to the recording where it hardly stands out."""
    if stop_s <= start_s:
        raise _Unresolved(
            f"condition {name} is {'empty' if stop_s == start_s else 'reversed'}: it starts at "
            f"{_time(start_s)} and ends at {_time(stop_s)}"
        )
    begin_s, end_s = max(start_s, Fraction(0)), min(stop_s, duration_s)
    out_s = max(begin_s - start_s, stop_s - end_s)
    if out_s > CLIPPED_S or end_s <= begin_s:
        raise _Unresolved(
            f"condition {name}, from {_time(start_s)} to {_time(stop_s)}, lies outside the "
            f"recording, which is {_time(duration_s)} long; shorten it in the recipe, or leave "
            "this recording out"
        )
    return Condition(begin_s, end_s, name)


def _time(time_s: Fraction) -> str:
    return f"{round(float(time_s), 3):.15g} s"
