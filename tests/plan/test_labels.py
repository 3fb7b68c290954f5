"""Signals are matched to labels where that is unambiguous, and never guessed."""

from collections.abc import Sequence
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from waveassay.contract import SignalError
from waveassay.plan.labels import match_signals, unit_scale
from waveassay.recipe.model import SignalRule


def rule(*labels: str, **more: Any) -> SignalRule:
    return SignalRule(labels=labels, unit="uV", **more)


def index_of(wanted: str | Sequence[str], labels: Sequence[str]) -> int:
    """Return the index of the one signal that a rule with these labels means."""
    names = [wanted] if isinstance(wanted, str) else wanted
    ((name, index),) = match_signals({"one": rule(*names)}, labels, ["one"])["one"]
    assert name == "one"
    return index


# In each row the recipe's label means this one of the file's, between others that it does not mean.
MEANT = [
    ("Fp1", "Fp1"),
    ("Fp1", "FP1"),
    ("Fp1", "fp1"),
    ("Fp1", " Fp1 "),
    ("Fp1", "Fp 1"),
    ("Fp1", "EEG Fp1"),
    ("Fp1", "EEG FP1"),
    ("Fp1", "eeg  fp1"),
    ("Fp1", "EEG Fp1-REF"),
    ("Fp1", "EEG Fp1-Ref"),
    ("Fp1", "EEG FP1-LE"),
    ("Fp1", "Fp1-A1"),
    ("Fp1", "Fp1-A2"),
    ("Fp1", "EEG Fp1-M1"),
    ("Fp1", "Fp1 - M2"),
    ("Fp1", "Fp1-AVG"),
    ("EEG Fp1", "Fp1"),
    ("EEG Fp1", "EEGFp1"),
    ("EEG Fp1", "Fp1-Ref"),
    ("EEG Fp1", "EEG Fp1-A2"),
    ("Fp1-REF", "Fp1"),
    ("EEG Fp1-REF", "Fp1"),
    ("EEG Fp1-REF", "fp1-ref"),
    ("F3-A2", "F3-A2"),
    ("F3-A2", "EEG F3-A2"),
    ("F3-A2", "EEG F3 - a2"),
    ("Fp1-F7", "EEG Fp1-F7"),
    ("Fp1-F7", "FP1 - F7"),
    ("Fp1-F7", "FP1–F7"),
    ("EEG Fp1-F7", "Fp1-F7"),
    ("EEG Fp1-F7", "EEG Fp1-F7-REF"),
    ("ABP", "ABP"),
    ("ABP", "abp"),
    ("ABP", "Press ABP"),
    ("ART", "Art"),
    ("P1", "p 1"),
    ("ECG II", "ECG II"),
    ("ECG II", "II"),
    ("II", "ecg II"),
    ("Resp chest", "chest"),
    ("SaO2", "SAO2"),
    ("*Fp1*", "EEG Fp1-REF"),
    ("eeg fp1*", "EEG Fp1-REF"),
    ("A1", "EEG A1-REF"),
]


@pytest.mark.parametrize(("wanted", "label"), MEANT)
def test_a_label_is_found_among_others(wanted: str, label: str) -> None:
    assert index_of(wanted, ["EEG Cz-Pz", "Light level", label, "EMG chin"]) == 2


# In each row the recipe's label means none of the file's.
NOT_MEANT = [
    ("Fp1", "Fp1-F7"),
    ("Fp1", "EEG Fp1-F7"),
    ("Fp1", "Fp2"),
    ("Fp1", "Fp10"),
    ("Fp1-F7", "Fp1"),
    ("Fp1-F7", "Fp1-REF"),
    ("F3-A2", "F3"),
    ("F3-A2", "F3-A1"),
    ("F3-A2", "F3-REF"),
    ("A1", "A1-A2"),
    ("M1", "M1-M2"),
    ("EEG Fp1", "EMG Fp1"),
    ("EEG chin", "EMG chin"),
    ("Fp1", "Foo Fp1"),
    ("ABP", "ABP mean"),
    ("ABP", "ABP2"),
    ("T3", "T7"),
    ("EEG F*", "F3"),
    ("F*", "EEG F3"),
    ("EEG", "EEG Fp1"),
    ("REF", "Fp1-REF"),
    ("Fp1", ""),
]


@pytest.mark.parametrize(("wanted", "label"), NOT_MEANT)
def test_another_signal_is_never_taken_instead(wanted: str, label: str) -> None:
    with pytest.raises(SignalError, match="is missing"):
        index_of(wanted, [label, "Light level"])


# In each row two signals of the file fit equally well: stop.
AMBIGUOUS = [
    ("Fp1", ["Fp1", "Fp1"]),
    ("Fp1", ["fp1", "FP1"]),
    ("Fp1", ["EEG Fp1", "EEG FP1"]),
    ("F3", ["F3-A1", "F3-A2"]),
    ("F3", ["EEG F3-M1", "F3-REF"]),
    ("EEG F3", ["EEG F3-LE", "EEG F3-AVG"]),
    ("II", ["ECG II", "EEG II"]),
    ("F*", ["F3", "F4"]),
    ("f*", ["F3", "Fz"]),
]


@pytest.mark.parametrize(("wanted", "labels"), AMBIGUOUS)
def test_two_that_fit_equally_well_stop_the_recording(wanted: str, labels: list[str]) -> None:
    with pytest.raises(SignalError) as caught:
        index_of(wanted, ["Light", *labels])
    text = str(caught.value)
    assert "signal one fits 2 of the file's signals equally well" in text
    for number, label in enumerate(labels, start=2):
        assert f"'{label}' (signal {number})" in text


@pytest.mark.parametrize(
    ("wanted", "labels", "index"),
    [
        ("Fp1", ["fp1", "Fp1"], 1),  # as written before another case
        ("Fp1", ["EEG Fp1", "FP1"], 1),  # case before prefix
        ("Fp1", ["Fp1-REF", "EEG Fp1"], 1),  # prefix before reference
        ("EEG Fp1", ["Fp1", "EMG Fp1", "EEG Fp1"], 2),
        ("F3", ["F3-A1", "F3-A2", "F3"], 2),
        (["ABP", "ART"], ["ART", "ABP"], 1),  # the better label wins
        (["ABP", "ART"], ["ART", "Press abp"], 1),  # ... however it is spelt
        (["ABP", "ART"], ["ART", "P1"], 0),
        (["ABP", "ART"], ["ART", "art"], 0),
    ],
)
def test_what_is_closer_wins(wanted: str | list[str], labels: list[str], index: int) -> None:
    assert index_of(wanted, labels) == index


def test_many_takes_all_and_names_each_by_its_label() -> None:
    rules = {"scalp": rule("EEG *", "Cz", many=True)}
    labels = ["EEG Fp1", "ABP", "eeg  Fp2", "Cz-REF", "EMG chin"]
    assert match_signals(rules, labels, ["scalp"]) == {
        "scalp": (("EEG Fp1", 0), ("eeg Fp2", 2), ("Cz-REF", 3))
    }


def test_only_what_is_wanted_must_be_there() -> None:
    rules = {"left": rule("Fp1"), "artery": rule("ABP"), "gas": rule("CO2", optional=True)}
    assert match_signals(rules, ["Fp1"], ["left", "gas"]) == {"left": (("left", 0),), "gas": ()}


def test_a_missing_signal_lists_what_is_there_and_what_is_nearest() -> None:
    with pytest.raises(SignalError) as caught:
        match_signals({"left": rule("EEG Fp1-F7", "Fp1-F7")}, ["EEG Fp1-F8", "ABP"], ["left"])
    assert str(caught.value) == (
        "signal left ('EEG Fp1-F7', 'Fp1-F7') is missing: the file has 'EEG Fp1-F8', 'ABP', "
        "nearest 'EEG Fp1-F8'; add the right label to signals.left.labels, or set optional: true"
    )


def test_an_optional_signal_may_be_missing_but_not_ambiguous() -> None:
    rules = {"artery": rule("ABP", optional=True)}
    with pytest.raises(SignalError, match="they bear one label, so rename one in the file"):
        match_signals(rules, ["ABP", "ABP"], ["artery"])


def test_one_signal_of_the_file_is_not_two_of_the_recipe() -> None:
    rules = {"left": rule("Fp1"), "right": rule("Fp2", "EEG Fp1")}
    with pytest.raises(
        SignalError, match=r"left and right would both be 'EEG Fp1-REF' \(signal 1\)"
    ):
        match_signals(rules, ["EEG Fp1-REF"], ["left", "right"])
    both = {"scalp": rule("EEG *", many=True), "front": rule("EEG F*", many=True)}
    with pytest.raises(SignalError, match="scalp and front would both be"):
        match_signals(both, ["EEG Fp1"], ["scalp", "front"])


def test_a_rule_for_many_may_share_a_signal_with_a_rule_for_one() -> None:
    rules = {"left": rule("Fp1"), "scalp": rule("EEG *", many=True)}
    assert match_signals(rules, ["EEG Fp1", "EEG Fp2"], ["left", "scalp"]) == {
        "left": (("left", 0),),
        "scalp": (("EEG Fp1", 0), ("EEG Fp2", 1)),
    }


def test_two_signals_never_get_one_name() -> None:
    twice = {"scalp": rule("EEG *", many=True)}
    with pytest.raises(SignalError, match="two signals would be named 'EEG Fp1'"):
        match_signals(twice, ["EEG Fp1", "EEG  Fp1"], ["scalp"])
    clash = {"cz": rule("Pz"), "scalp": rule("c*", many=True)}
    with pytest.raises(SignalError, match="two signals would be named 'cz'"):
        match_signals(clash, ["Pz", "cz"], ["cz", "scalp"])


def test_all_that_is_wrong_is_said_at_once() -> None:
    rules = {"left": rule("Fp1"), "right": rule("Fp2"), "artery": rule("ABP")}
    with pytest.raises(SignalError) as caught:
        match_signals(rules, ["ABP", "ABP"], ["left", "right", "artery"])
    assert [part.split(" ")[1] for part in str(caught.value).split("; ") if "signal " in part] == [
        "left",
        "right",
        "artery",
    ]


LABEL = st.text("FpPzTO1278 -", min_size=1, max_size=8).filter(lambda text: text.strip())


@given(st.lists(LABEL, min_size=1, max_size=6), st.data())
def test_a_label_as_written_always_means_itself(labels: list[str], data: st.DataObject) -> None:
    wanted = data.draw(st.sampled_from(labels))
    same = [i for i, label in enumerate(labels) if label.strip() == wanted.strip()]
    if len(same) == 1:
        assert index_of(wanted, labels) == same[0]
    else:
        with pytest.raises(SignalError, match=f"fits {len(same)} "):
            index_of(wanted, labels)


@given(LABEL, st.lists(LABEL, min_size=1, max_size=6), st.randoms(use_true_random=False))
def test_the_order_of_the_file_decides_nothing(wanted: str, labels: list[str], chance: Any) -> None:
    def outcome(given: Sequence[str]) -> str:
        try:
            return given[index_of(wanted, given)]
        except SignalError as error:
            return str(error).split(":")[0]

    shuffled = list(labels)
    chance.shuffle(shuffled)
    assert outcome(labels) == outcome(shuffled)


@pytest.mark.parametrize(
    ("rule_unit", "file_unit", "scale"),
    [
        ("uV", "uV", 1.0),
        ("uV", "µV", 1.0),
        ("uV", "UV", 1.0),
        ("uV", "mV", 1000.0),
        ("uV", "V", 1e6),
        ("mV", "uV", 0.001),
        ("uV", "nV", 0.001),
        ("mmHg", "mmHg", 1.0),
        ("mmHg", "MMHG", 1.0),
    ],
)
def test_values_come_to_the_recipes_unit(rule_unit: str, file_unit: str, scale: float) -> None:
    assert unit_scale(rule_unit, file_unit) == scale


def test_a_pressure_in_kilopascal_comes_to_millimetres_of_mercury() -> None:
    # The conventional millimetre of mercury is 133.322387415 Pa (ISO 80000-4:2006, from memory).
    assert unit_scale("mmHg", "kPa") == pytest.approx(1000 / 133.322387415, rel=1e-6)


@pytest.mark.parametrize(
    ("file_unit", "says"),
    [
        ("", "the file states no unit, and the recipe asks for uV"),
        ("   ", "write its unit into the file's header"),
        ("mmHg", "the file's unit is 'mmHg', and the recipe asks for uV: 'mmHg' cannot be"),
        ("furlongz", "'furlongz' is not a known unit"),
        ("%", "the file's unit is '%'"),
        ("??", "the file's unit is '??'"),
    ],
)
def test_a_unit_that_does_not_fit_says_what_to_do(file_unit: str, says: str) -> None:
    with pytest.raises(SignalError) as caught:
        unit_scale("uV", file_unit, "EEG Fp1")
    assert str(caught.value).startswith("signal 'EEG Fp1': ")
    assert says in str(caught.value)
