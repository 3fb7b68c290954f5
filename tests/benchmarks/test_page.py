"""The page says what was measured, and the README and the figure say the same."""

import sys
from dataclasses import replace
from pathlib import Path

import pytest

from benchmarks import example_run, figure, full_chain, full_long, reader, second_run, start_up
from benchmarks.machine import machine
from benchmarks.made_up import findings
from benchmarks.measured import Spread
from benchmarks.page import PAGE, README, page, short, shown_in_readme, with_table
from benchmarks.page_rows import target_rows
from benchmarks.rows import Row


@pytest.mark.parametrize(
    ("spread", "verdict"),
    [
        (Spread(1, 2, 3), "met"),
        (Spread(1, 3, 3.1), "median met"),
        (Spread(1, 3.1, 4), "**not met**"),
    ],
)
def test_verdict_looks_at_the_median_and_the_worst(spread: Spread, verdict: str) -> None:
    assert Row("this", spread, "s", limit=3).verdict == verdict
    assert Row("this", spread, "s").verdict == "none set"


@pytest.mark.parametrize(
    ("spread", "verdict"),
    [
        (Spread(5, 8, 9), "excellent"),
        (Spread(4, 8, 9), "median met"),
        (Spread(5, 7, 9), "met"),
        (Spread(1, 4, 9), "**not met**"),
    ],
)
def test_more_may_be_better(spread: Spread, verdict: str) -> None:
    row = Row("this", spread, limit=5, excellent=8, at_least=True)
    assert row.verdict == verdict
    assert row.cells[1] == "at least 5 (8 is excellent)"


def test_page_shows_every_target_and_what_is_not_met() -> None:
    found = findings()
    text = page(found, machine(), "2031-04-05")
    rows = [line for line in text.splitlines() if line.endswith(("| met |", "| excellent |"))]
    assert len(rows) == len(list(target_rows(found)))
    limits = [
        *reader.TARGETS.values(),
        *start_up.TARGETS_S.values(),
        example_run.TARGET_S,
        second_run.TARGET_S,
        full_chain.BOUND_TARGET[0],
        full_long.WALL_TARGET_S[0],
        full_long.BOUND_TARGET[0],
        full_long.MEMORY_TARGET_MB[0],
    ]
    for limit in limits:
        assert any(f"at most {limit:g}" in row for row in rows), limit
    for limit, _ in (
        *full_chain.SCRIPT_TARGETS.values(),
        *full_long.SPEED_UP_TARGETS.values(),
    ):
        assert any(f"at least {limit:g}" in row for row in rows), limit
    slow = replace(found["second_run"]["again_s"], median=4.0, high=5.0)
    found["second_run"]["again_s"] = slow
    again = page(found, machine(), "2031-04-05")
    assert "| identical second run | at most 3 s | 4 (0.1 to 5) s | **not met** |" in again


def test_page_says_that_the_disk_had_no_room() -> None:
    found = findings()
    whole = page(found, machine(), "2031-04-05")
    assert "no room" not in whole
    found["full_long"][1]["hours"] = 12.0
    text = page(found, machine(), "2031-04-05")
    assert "The disk had no room for 24 h: 12 h were measured." in text
    assert "| 24 h x 64 channels, one worker | at most 90 s" in whole
    assert "| 12 h x 64 channels, one worker | at most 90 s" not in text


def test_page_names_no_place_of_this_machine() -> None:
    text = page(findings(), machine(), "2031-04-05")
    for place in (Path.home(), Path(sys.prefix), Path(__file__).parents[2]):
        assert str(place) == "/" or str(place) not in text, place


def test_readme_shows_what_the_page_shows() -> None:
    assert shown_in_readme(README.read_text(encoding="utf-8")) == short(
        PAGE.read_text(encoding="utf-8")
    )


def test_readme_gets_the_table_of_a_page() -> None:
    text = page(findings(), machine(), "2031-04-05")
    readme = with_table(README.read_text(encoding="utf-8"), text)
    assert shown_in_readme(readme) == short(text)
    assert "| identical second run | at most 3 s | 0.2 s |" in readme
    assert with_table(readme, text) == readme
    with pytest.raises(ValueError, match="no place"):
        with_table("# A readme", text)


def test_figure_is_small_and_the_same_each_time(tmp_path: Path) -> None:
    figure.draw(findings(), tmp_path / "one.png")
    figure.draw(findings(), tmp_path / "two.png")
    one = (tmp_path / "one.png").read_bytes()
    assert len(one) < 150_000
    assert one == (tmp_path / "two.png").read_bytes()
