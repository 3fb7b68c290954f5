"""Match the signals that a recipe names to the labels of a file. Nothing is ever guessed.

A recipe's label is looked for in four ways, from exact to most tolerant; the first way that finds
something decides:

1. as written;
2. case and spaces ignored;
3. a type prefix ignored (``EEG Fp1`` for ``Fp1``), when only one side has one;
4. a reference suffix ignored as well (``EEG Fp1-REF`` for ``Fp1``), when only the file has one
   (or only the recipe, for the suffix REF, which names no electrode).

The prefixes are the signal types of EDF+. The suffixes are common practice, no source: a common
reference, linked ears, either ear or mastoid, the average. ``Fp1-F7`` is a pair, not ``Fp1`` with a
reference; so is ``A1-A2``. A label with ``*`` is looked for in the first two ways only.
"""

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from difflib import get_close_matches
from functools import lru_cache

from waveassay.contract import SignalError, UnitError, unit_factor
from waveassay.recipe.model import SignalRule

# fmt: off
_TYPES = frozenset({
    "eeg", "ecg", "eog", "erg", "emg", "meg", "mcg", "ep", "temp", "resp", "sao2", "light",
    "sound", "event", "dist", "area", "vol", "dur", "vel", "mass", "angle", "force", "press",
})
# fmt: on
_ELECTRODES = frozenset({"a1", "a2", "m1", "m2"})
_REFERENCES = _ELECTRODES | {"ref", "le", "avg"}
_UNNAMED = "ref"
_DASHES = str.maketrans({"\u2010": "-", "\u2011": "-", "\u2013": "-", "\u2212": "-"})

Matched = Mapping[str, tuple[tuple[str, int], ...]]


@dataclass(frozen=True)
class _Parts:
    """A label taken apart: lower case, no spaces; empty where there is no such part."""

    kind: str
    site: str
    reference: str

    @property
    def plain(self) -> str:
        """The label without its type prefix."""
        return f"{self.site}-{self.reference}" if self.reference else self.site


def match_signals(
    rules: Mapping[str, SignalRule], labels: Sequence[str], wanted: Sequence[str]
) -> Matched:
    """Return, for each wanted rule, the name and file index of every signal that it means.

    A rule's labels are tried in order, best first: the first that is found wins. With ``many``,
    all of its labels count, and each signal keeps its own label as name. An optional rule without
    a match gives an empty tuple.

    Raises
    ------
    SignalError
        When a signal is missing, when one label of a rule fits several of the file, or when two
        rules mean the same signal of the file (a rule with ``many`` may share one with a rule
        without, since their names differ). All that is wrong is said at once.
    """
    problems: list[str] = []
    matched: dict[str, tuple[tuple[str, int], ...]] = {}
    for role in wanted:
        rule = rules[role]
        indices = _all(rule, labels) if rule.many else _best(rule, labels)
        if not indices and not rule.optional:
            problems.append(_missing(role, rule, labels))
        elif len(indices) > 1 and not rule.many:
            problems.append(_ambiguous(role, labels, indices))
        matched[role] = tuple(
            (" ".join(labels[index].split()) if rule.many else role, index) for index in indices
        )
    problems.extend(_claimed_twice(rules, matched, labels))
    problems.extend(_same_name(rules, matched, labels))
    if problems:
        raise SignalError("; ".join(problems))
    return matched


def unit_scale(rule_unit: str, file_unit: str, label: str = "") -> float:
    """Return the factor that brings the file's values to the recipe's unit.

    Raises
    ------
    SignalError
        When the file states no unit, an unknown one, or one that measures something else.
    """
    of = f"signal '{label}': " if label else ""
    if not file_unit.strip():
        raise SignalError(
            f"{of}the file states no unit, and the recipe asks for {rule_unit}; an uncalibrated "
            "signal cannot be used: write its unit into the file's header, or leave it out of the "
            "recipe"
        )
    try:
        return float(unit_factor(file_unit, rule_unit))
    except UnitError as error:
        raise SignalError(
            f"{of}the file's unit is '{file_unit.strip()}', and the recipe asks for {rule_unit}: "
            f"{error}; correct the unit in the recipe, or in the file's header if that is wrong"
        ) from None


def _best(rule: SignalRule, labels: Sequence[str]) -> tuple[int, ...]:
    for wanted in rule.labels:
        found = _look_for(wanted, labels, together=False)
        if found:
            return found
    return ()


def _all(rule: SignalRule, labels: Sequence[str]) -> tuple[int, ...]:
    found = {index for label in rule.labels for index in _look_for(label, labels, together=True)}
    return tuple(sorted(found))


def _look_for(wanted: str, labels: Sequence[str], *, together: bool) -> tuple[int, ...]:
    """Return the signals that one label of a rule means, by the first way that finds any.

    ``together`` joins the first two ways, so that a wildcard does not pass over ``eeg Fp2``
    because ``EEG Fp1`` is spelt better.
    """
    if "*" in wanted:
        exact, loose = _pattern(wanted.strip()), _pattern(_squeezed(wanted))
        tiers = [
            [bool(exact.fullmatch(label.strip())) for label in labels],
            [bool(loose.fullmatch(_squeezed(label))) for label in labels],
        ]
    else:
        mine, theirs = _parts(wanted), [_parts(label) for label in labels]
        tiers = [
            [label.strip() == wanted.strip() for label in labels],
            [_squeezed(label) == _squeezed(wanted) for label in labels],
            [_same_kind(mine, other) and mine.plain == other.plain for other in theirs],
            [_same_site(mine, other) for other in theirs],
        ]
    if together:
        tiers = tiers[1:]  # the second way finds all that the first does
    for tier in tiers:
        found = tuple(index for index, hit in enumerate(tier) if hit)
        if found:
            return found
    return ()


def _same_kind(mine: _Parts, other: _Parts) -> bool:
    return mine.kind == other.kind or not mine.kind or not other.kind


def _same_site(mine: _Parts, other: _Parts) -> bool:
    """Tell whether two labels name one electrode, a reference set aside on one side only."""
    if not _same_kind(mine, other) or mine.site != other.site:
        return False
    return not mine.reference or (mine.reference == _UNNAMED and not other.reference)


def _squeezed(label: str) -> str:
    return "".join(label.translate(_DASHES).split()).casefold()


@lru_cache(maxsize=4096)
def _parts(label: str) -> _Parts:
    words = label.translate(_DASHES).casefold().split()
    kind = words.pop(0) if len(words) > 1 and words[0] in _TYPES else ""
    site = "".join(words)
    head, dash, tail = site.rpartition("-")
    own_pair = head in _ELECTRODES and tail in _ELECTRODES  # A1-A2
    if dash and head and tail in _REFERENCES and not own_pair:
        return _Parts(kind, head, tail)
    return _Parts(kind, site, "")


@lru_cache(maxsize=256)
def _pattern(label: str) -> re.Pattern[str]:
    return re.compile(".*".join(re.escape(part) for part in label.split("*")))


def _missing(role: str, rule: SignalRule, labels: Sequence[str]) -> str:
    wanted = _quoted(rule.labels)
    if not labels:
        return f"signal {role} ({wanted}) is missing: the file has no signals"
    by_spelling = {_parts(label).plain: label for label in reversed(labels)}
    near: dict[str, None] = {}
    for label in rule.labels:
        for spelling in get_close_matches(_parts(label).plain, by_spelling, n=3, cutoff=0.5):
            near[by_spelling[spelling]] = None
    nearest = f", nearest {_quoted(list(near)[:3])}" if near else ""
    return (
        f"signal {role} ({wanted}) is missing: the file has {_quoted(labels)}{nearest}; add the "
        f"right label to signals.{role}.labels, or set optional: true"
    )


def _ambiguous(role: str, labels: Sequence[str], indices: Sequence[int]) -> str:
    if len({labels[index].strip() for index in indices}) == 1:
        remedy = "they bear one label, so rename one in the file"
    else:
        remedy = (
            f"write the whole label of the right one in signals.{role}.labels, or set many: true "
            "if all are meant"
        )
    return (
        f"signal {role} fits {len(indices)} of the file's signals equally well: "
        f"{_numbered(labels, indices)}; {remedy}"
    )


def _claimed_twice(
    rules: Mapping[str, SignalRule], matched: Matched, labels: Sequence[str]
) -> list[str]:
    problems = []
    owners: dict[tuple[int, bool], list[str]] = {}
    for role, found in matched.items():
        if len(found) == 1 or rules[role].many:
            for _, index in found:
                owners.setdefault((index, rules[role].many), []).append(role)
    for (index, _), roles in sorted(owners.items()):
        if len(roles) > 1:
            problems.append(
                f"signals {' and '.join(roles)} would both be {_numbered(labels, [index])}; make "
                "their labels differ"
            )
    return problems


def _same_name(
    rules: Mapping[str, SignalRule], matched: Matched, labels: Sequence[str]
) -> list[str]:
    by_name: dict[str, set[int]] = {}
    for role, found in matched.items():
        if len(found) == 1 or rules[role].many:
            for name, index in found:
                by_name.setdefault(name, set()).add(index)
    return [
        f"two signals would be named '{name}' in the tables: {_numbered(labels, sorted(indices))}; "
        "give the recipe's signal another name, or narrow the labels"
        for name, indices in by_name.items()
        if len(indices) > 1
    ]


def _quoted(labels: Sequence[str]) -> str:
    shown = ", ".join(f"'{label}'" for label in labels[:40])
    return shown if len(labels) <= 40 else f"{shown} and {len(labels) - 40} more"


def _numbered(labels: Sequence[str], indices: Sequence[int]) -> str:
    return ", ".join(f"'{labels[index]}' (signal {index + 1})" for index in indices)
