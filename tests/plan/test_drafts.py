"""Keys of tasks: what is one recording's own changes them, and so does every signal's own."""

from dataclasses import replace
from datetime import datetime
from fractions import Fraction

from waveassay.contract import Interval
from waveassay.plan.drafts import drafts_of, holders_of
from waveassay.plan.passage import Passage, passages
from waveassay.plan.routes import Routes
from waveassay.plan.tasks import Task, needed_by, tasks_of
from waveassay.recipe import check_recipe
from waveassay.recipe.model import Recipe
from waveassay.recording.facts import Facts, SignalFacts

RECIPE = """\
recipe: keys
edition: 1
signals:
  frontal: {labels: ["EEG *"], many: true, unit: uV, modality: eeg}
chains:
  cortex:
    - load: {signals: [frontal]}
    - filter.butterworth: {high_pass: 0.5 Hz}
    - epoch.consecutive: {length: 4 s}
    - spectrum.multitaper: {half_bandwidth: 0.75 Hz}
    - feature.spectral_edge: {fraction: 95 %, within: [0.5 Hz, 30 Hz]}
    - export.table: {}
"""
EDF = ("EEG Fp1", "EEG Fp2", "EEG F7")


def recipe() -> Recipe:
    checked = check_recipe(RECIPE, "keys.yaml")
    assert checked.recipe is not None, checked.problems
    return checked.recipe


def facts(labels: tuple[str, ...] = EDF, units: tuple[str, ...] = ("uV",) * 3) -> Facts:
    signals = tuple(
        SignalFacts(place, label, unit, Fraction(128), 0, -1, 1, -9, 9, "", "")
        for place, (label, unit) in enumerate(zip(labels, units, strict=True))
    )
    pieces = (Interval(Fraction(0), Fraction(1500)),)
    start = datetime(2031, 4, 5, 9, 30)
    return Facts("a.edf", "EDF", 1, start, Fraction(1500), signals, pieces, (), ())


def passage(name: str = "r", sha256: str = "0" * 64, known: Facts | None = None) -> Passage:
    (way,), _ = passages(Routes(recipe()), name, sha256, known or facts())
    return way


def keys(tasks: tuple[Task, ...]) -> list[str]:
    return [task.key for task in tasks]


def test_a_name_stands_in_the_keys_of_tables_alone_and_the_digest_in_all() -> None:
    tasks = tasks_of(passage())
    named = tasks_of(passage("other"))
    assert [a.key == b.key for a, b in zip(tasks, named, strict=True)] == [
        task.action != "finish" for task in tasks
    ]
    assert not set(keys(tasks)) & set(keys(tasks_of(passage(sha256="1" * 64))))


def test_what_is_one_signal_s_own_changes_every_key() -> None:
    known = keys(tasks_of(passage()))
    others = [
        facts(("EEG Fp1", "EEG Fp2", "EEG F8")),  # a name
        facts(("EEG F7", "EEG Fp2", "EEG Fp1")),  # places
        facts(units=("uV", "mV", "uV")),  # what turns the file's unit into the recipe's
    ]
    seen = [known, *(keys(tasks_of(passage(known=other))) for other in others)]
    assert len({key for some in seen for key in some}) == 4 * len(known)


def test_signals_of_another_rate_go_another_way() -> None:
    some = facts()
    signals = (*some.signals[:2], replace(some.signals[2], rate_hz=Fraction(256)))
    mixed = tasks_of(passage(known=replace(some, signals=signals)))
    assert not set(keys(mixed)) & set(keys(tasks_of(passage())))


def test_a_table_rests_on_all_that_was_prepared_and_cut_for_it() -> None:
    tasks = tasks_of(passage())
    by_key = {task.key: task for task in tasks}
    *others, finish = tasks
    assert sorted(needed_by(finish, by_key)) == sorted(task.key for task in others)
    first = tasks[0]
    assert (first.action, needed_by(first, by_key)) == ("prepare", [])


def test_a_step_s_work_is_held_where_its_level_has_it() -> None:
    way = passage()
    actions = {
        step: {drafts_of(way)[place].action for place in places} for step, places in holders_of(way)
    }
    assert actions == {
        "load": {"prepare"},
        "filter.butterworth": {"prepare"},
        "epoch.consecutive": {"rows"},
        "spectrum.multitaper": {"rows"},
        "feature.spectral_edge": {"rows"},
        "export.table": {"finish"},
    }
    counts = {step: len(places) for step, places in holders_of(way)}
    assert counts["load"] == counts["epoch.consecutive"] == 2  # stretches of 1,500 s
