"""The steps on rows are measured on what the script says. What is found is not for tests."""

from statistics import median

import pytest

from benchmarks import rows_steps


def test_every_step_is_measured_in_both_precisions() -> None:
    found = rows_steps.measure(hours=0.5, rounds=1)
    for precision in rows_steps.PRECISIONS:
        times = found[precision]
        names = {"epochs", *rows_steps.SPECTRA, *rows_steps.FEATURES}
        assert names <= set(times)
        assert all(value > 0 for value in times.values())
        assert times["features"] == pytest.approx(sum(times[n] for n in rows_steps.FEATURES))
        for name in rows_steps.SPECTRA:
            ratio = times[name] / times[f"{name} bound"]
            assert times[f"{name} over bound"] == pytest.approx(ratio)


def test_a_ratio_is_taken_within_a_round(monkeypatch: pytest.MonkeyPatch) -> None:
    """A machine that is slower for a while, by one factor for all, changes no ratio."""
    names = ["epochs", *rows_steps.SPECTRA, *rows_steps.FEATURES]
    slow = iter([9.0, 9.0, 1.0, 1.0, 50.0, 50.0, 2.0, 2.0])  # both precisions, round after round
    factor = [1.0]

    def bounds(_: object) -> dict[str, float]:
        factor[0] = next(slow)
        return {f"{name} bound": factor[0] for name in rows_steps.SPECTRA}

    monkeypatch.setattr(rows_steps, "_bounds", bounds)
    monkeypatch.setattr(
        rows_steps, "_by_stretches", lambda _: {name: 3 * factor[0] for name in names}
    )
    found = rows_steps.measure(hours=0.1, rounds=3)
    for precision in rows_steps.PRECISIONS:
        assert found[precision]["welch over bound"] == 3.0
        assert found[precision]["welch"] == pytest.approx(1e3 * 3 * median([1, 50, 2]) / 0.1)
