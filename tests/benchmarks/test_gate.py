"""The speed gate fails on what is too slow, and on nothing else."""

from collections.abc import Sequence
from importlib.util import find_spec

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchmarks import gate
from benchmarks.gate import NOISE, Limit, Rounds

FAST, SLOW = [1.0, 1.1, 1.2, 1.3, 9.0], [5.0, 5.1, 5.2, 5.3, 9.0]
AT_MOST = Limit("this / that", 4.0)
AT_LEAST = Limit("that / this", 4.0, at_least=True)


class Machine:
    """Gives made-up rounds, one after another, and counts how many were asked for."""

    def __init__(self, *found: Rounds) -> None:
        self.found = list(found)
        self.asked: list[int] = []

    def __call__(self, rounds: int) -> Rounds:
        self.asked.append(rounds)
        return self.found.pop(0)


def test_gate_passes_at_once() -> None:
    machine = Machine({AT_MOST: FAST, AT_LEAST: SLOW})
    assert gate.gate(machine, rounds=5)
    assert machine.asked == [5]


def test_gate_fails_after_a_second_try(capsys: pytest.CaptureFixture[str]) -> None:
    machine = Machine({AT_MOST: SLOW, AT_LEAST: SLOW}, {AT_MOST: SLOW, AT_LEAST: SLOW})
    assert not gate.gate(machine, rounds=5)
    assert machine.asked == [5, 10]
    told = capsys.readouterr().out
    allowed = f"(with noise {AT_MOST.allowed:.2f})"
    assert f"NOT REACHED: this / that: at most 4 {allowed}; favourable quartile 5.10" in told
    assert "The speed gate fails: this / that." in told


def test_gate_fails_where_more_is_better() -> None:
    assert not gate.gate(Machine({AT_LEAST: FAST}, {AT_LEAST: FAST}))


def test_gate_passes_when_a_second_try_does() -> None:
    assert gate.gate(Machine({AT_MOST: SLOW}, {AT_MOST: FAST}))


def test_what_was_reached_once_is_not_missed() -> None:
    other = Limit("other", 4.0)
    assert gate.gate(Machine({AT_MOST: SLOW, other: FAST}, {AT_MOST: FAST, other: SLOW}))


def test_command_ends_with_failure(monkeypatch: pytest.MonkeyPatch) -> None:
    for rounds, code in ((SLOW, 1), (FAST, 0)):
        monkeypatch.setattr(gate, "measure", lambda _, rounds=rounds: {AT_MOST: rounds})
        with pytest.raises(SystemExit) as ended:
            gate.main()
        assert ended.value.code == code


def test_a_difference_that_drowned_in_noise_reaches_nothing() -> None:
    assert not AT_MOST.reached([-1.0, -0.5, 0.1])
    assert not AT_LEAST.reached([-9.0, -8.0, -7.0])


@given(st.lists(st.floats(0.01, 100), min_size=2), st.floats(0.5, 50), st.booleans())
def test_all_rounds_on_one_side_decide(rounds: Sequence[float], value: float, least: bool) -> None:
    limit = Limit("this", value, at_least=least)
    if all(r >= value if least else r <= value for r in rounds):
        assert limit.reached(rounds)
    beyond = value / (1 + NOISE) if least else value * (1 + NOISE)
    if all(r < beyond if least else r > beyond for r in rounds):
        assert not limit.reached(rounds)


def test_gate_measures_every_ratio(monkeypatch: pytest.MonkeyPatch) -> None:
    for name, value in (
        ("CHANNELS", 1),
        ("LENGTH_S", 120),
        ("LOOP_LENGTH_S", 60),
        ("STAGES_HOURS", 0.1),
    ):
        monkeypatch.setattr(gate, name, value)
    found = gate.measure(1)
    whats = {limit.what for limit in found}
    assert {"whole chain / bound, double", "filter and resample / bound"} <= whats
    assert all(len(rounds) == 1 for rounds in found.values())
    if find_spec("pyedflib"):
        assert sum(limit.at_least for limit in found) == 2
