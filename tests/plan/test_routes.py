"""What recordings share is worked out once, and changes nothing of what is planned for each."""

from collections import Counter
from datetime import datetime
from fractions import Fraction
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from waveassay.contract import Interval
from waveassay.plan import routes as routes_module
from waveassay.plan.passage import Passage, passages
from waveassay.plan.plan import PlannedRecording, ReadRecording, make_plan
from waveassay.plan.recordings import Found
from waveassay.plan.routes import Routes
from waveassay.recipe import check_recipe, library
from waveassay.recipe.fold import fold
from waveassay.recipe.model import Recipe
from waveassay.recording.facts import Annotation, Facts, SignalFacts

NOWHERE = Path("never-read.edf")
CHECKED = check_recipe(library.text("frontal-spectra"), "frontal-spectra.yaml")


def recipe() -> Recipe:
    assert CHECKED.recipe is not None
    return CHECKED.recipe


def facts(labels: tuple[str, ...], unit: str, rate_hz: Fraction, pieces_s: list[int]) -> Facts:
    """Return what a header would say; a gap of a second lies between pieces."""
    pieces, at = [], Fraction(0)
    for length_s in pieces_s:
        pieces.append(Interval(at, at + length_s))
        at += length_s + 1
    samples = int(sum(pieces_s) * rate_hz)
    signals = tuple(
        SignalFacts(index, label, unit, rate_hz, samples, -3200, 3200, -32768, 32767, "", "")
        for index, label in enumerate(labels)
    )
    marks = (Annotation(Fraction(1), None, "start"),)
    start = datetime(2031, 4, 5, 9, 30)
    end_s = pieces[-1].stop_s
    return Facts("a.edf", "EDF+D", 1, start, end_s, signals, tuple(pieces), marks, ())


FACTS = st.builds(
    facts,
    st.sampled_from(
        [("EEG Fp1-F7",), ("EEG Fp1-F7", "EEG Fp2-F8"), ("ECG", "EEG Fp2-F8", "EEG Fp1-F7")]
    ),
    st.sampled_from(["uV", "mV", "mmHg"]),
    st.sampled_from([Fraction(128), Fraction(256), Fraction(60), Fraction(1000, 3)]),
    st.lists(st.integers(5, 2000), min_size=1, max_size=3),
)


def told(item: PlannedRecording) -> tuple[object, ...]:
    return item.tasks, item.warnings, item.problem


@settings(max_examples=30, deadline=None)
@given(st.lists(FACTS, min_size=1, max_size=6))
def test_a_recording_is_planned_as_if_it_were_alone(some: list[Facts]) -> None:
    """Law: tasks, keys, costs, warnings and refusals are those of a plan made afresh."""
    found = [Found(f"r{number}", NOWHERE) for number in range(len(some))]
    read = {
        item.name: ReadRecording(f"{number:064x}", known)
        for number, (item, known) in enumerate(zip(found, some, strict=True))
    }
    together = make_plan(recipe(), found, read).recordings
    for item in together:
        (alone,) = make_plan(recipe(), [item.found], read).recordings
        assert told(item) == told(alone)


def test_a_chain_is_folded_once_for_all_signals_that_are_alike(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    folded: Counter[str] = Counter()

    def counting(chain, spec, **more):  # type: ignore[no-untyped-def]
        folded[f"{spec.name} {spec.rate_hz}"] += 1
        return fold(chain, spec, **more)

    monkeypatch.setattr(routes_module, "fold", counting)
    routes = Routes(recipe())
    labels = ("EEG Fp1-F7", "EEG Fp2-F8")
    ways: list[Passage] = []
    for number, rate_hz in enumerate([128, 128, 256, 128, 256]):
        known = facts(labels, "uV", Fraction(rate_hz), [60 + number])
        ways += passages(routes, f"r{number}", f"{number}", known)[0]
    assert dict(folded) == {f"{label} {rate}": 1 for label in labels for rate in (128, 256)}
    assert ways[0].lanes[0].program is ways[1].lanes[0].program
    assert ways[0].lanes[0].program is not ways[2].lanes[0].program
