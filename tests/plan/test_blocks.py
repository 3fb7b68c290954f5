"""Blocks of fused groups: they cover what is wanted, and what is kept comes from its own block."""

from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st

from chains import program_of
from waveassay.plan.blocks import LENGTHS_S, LONGEST_S, BlockGrid, lengths_s
from waveassay.plan.fusing import explained, units_of
from waveassay.plan.stretches import STRETCH_S
from waveassay.plan.windows import Form

steps_s = st.fractions(Fraction(1, 5000), 4, max_denominator=5000).filter(lambda s: s > 0)
grids = st.builds(BlockGrid, steps_s, st.sampled_from([s for _, s in LENGTHS_S] + [LONGEST_S]))
BAND = "filter.butterworth: {high_pass: 0.5 Hz}"


@given(grids, st.integers(0, 10**6), st.integers(1, 10**5), st.integers(0, 300), st.data())
def test_blocks_cover_a_span_and_hold_what_is_kept(
    grid: BlockGrid, low: int, count: int, around: int, data: st.DataObject
) -> None:
    own = (low, low + count)
    span = (max(0, low - around), low + count + data.draw(st.integers(0, 300)))
    blocks = grid.covering(span, own)
    assert grid.border(blocks[0]) <= own[0]
    assert grid.border(blocks[0]) - grid.margin <= span[0]
    assert grid.border(blocks[-1] + 1) >= own[1]
    assert grid.border(blocks[-1] + 1) + grid.margin >= span[1]
    if len(blocks) > 1:  # none could be spared
        assert grid.border(blocks[1]) > min(own[0], span[0] + grid.margin)
        assert grid.border(blocks[-1]) < max(own[1], span[1] - grid.margin)


@given(grids, st.integers(0, 1000))
def test_borders_lie_on_the_grid_and_no_block_is_longer_than_it_reads(
    grid: BlockGrid, number: int
) -> None:
    begins_s = grid.border(number) * grid.step_s
    assert 0 <= number * grid.length_s - begins_s < grid.step_s
    length = grid.border(number + 1) - grid.border(number)
    assert length + 2 * grid.margin + 17 <= grid.reads(17)


@given(st.fractions(0, 5000))
def test_stretches_are_whole_blocks_the_longer_the_farther_a_group_reaches(
    reach_s: Fraction,
) -> None:
    best, *others = lengths_s(reach_s)
    assert all((STRETCH_S / length_s).denominator == 1 for length_s in (best, *others))
    assert others == sorted((s for _, s in LENGTHS_S if s < best), reverse=True)
    assert reach_s <= best or best == LONGEST_S
    assert lengths_s(reach_s + 1)[0] >= best


@pytest.mark.parametrize(("cutoff", "length_s"), [("0.5", 150), ("0.1", 300), ("0.02", 900)])
def test_a_lower_cut_off_has_longer_blocks_and_fuses(cutoff: str, length_s: int) -> None:
    steps = [f"filter.butterworth: {{high_pass: {cutoff} Hz}}", "resample: {rate: 128 Hz}"]
    program = program_of(steps, 512)
    (unit,) = units_of(program, 0)
    assert unit.fused
    assert unit.block_s == length_s
    said = {told.text for told in explained(program)}
    assert len(said) == 1
    assert f"in blocks of {length_s} s" in said.pop()


def test_blocks_are_shorter_where_a_kernel_between_two_rates_is_large() -> None:
    steps = ["filter.butterworth: {high_pass: 0.1 Hz}", "resample: {rate: 128 Hz}"]
    assert [unit.block_s for unit in units_of(program_of(steps, 512), 0)] == [300]
    assert [unit.block_s for unit in units_of(program_of(steps, 500), 0)] == [150]


def test_a_change_of_rate_stands_apart_where_its_kernel_would_be_too_large() -> None:
    steps = ["filter.butterworth: {high_pass: 0.02 Hz}", "resample: {rate: 128 Hz}"]
    program = program_of(steps, 500)
    slow, change = units_of(program, 0)
    assert slow.block_s is None
    assert change.block_s == 150
    said = {told.step: told.text for told in explained(program)}
    assert said["filter.butterworth"].startswith("by its own function (")
    assert said["resample"].startswith("by its response, alone, in blocks of 150 s")
    for text in said.values():
        assert "the ratio 32/125 makes a kernel too large for a block" in text


def test_what_no_block_could_hold_is_run_step_by_step() -> None:
    steps = ["filter.butterworth: {high_pass: 1 mHz}", "filter.notch: {line: 50 Hz}"]
    program = program_of(steps, 2048)
    assert not any(unit.fused for unit in units_of(program, 0))
    assert "samples, more than" in explained(program)[0].text


@pytest.mark.parametrize("rate", ["512", "500", "249.98"])
def test_the_usual_steps_that_follow_need_no_more_blocks(rate: str) -> None:
    named = ", nominal_rate: 250 Hz" if rate == "249.98" else ""
    steps = [BAND, f"resample: {{rate: 128 Hz{named}}}"]
    exclude = "exclude.amplitude: {range: 300 uV, window: 1 s}"
    form = Form(program_of([*steps, exclude], rate), 0)
    own = tuple(int(k * STRETCH_S // form.step_s) for k in (3, 4))
    around = form.units[1]
    span = (own[0] - around.before, own[1] + around.after)
    grid = form.units[0].grid(form.step_s)
    assert len(grid.covering(span, own)) == STRETCH_S / grid.length_s  # type: ignore[arg-type]


def test_a_group_ends_where_another_step_takes_its_output() -> None:
    program = program_of(
        [
            f"{BAND}\n      as: slow",
            "filter.notch: {line: 50 Hz}",
            "resample: {rate: 128 Hz}",
            "filter.notch: {line: 50 Hz}\n      on: [slow]",
        ],
        512,
    )
    units = units_of(program, 0)
    assert [len(unit.moves) for unit in units if unit.fused] == [2]
    said = {told.step: told.text for told in explained(program)}
    assert "takes what filter.butterworth gives, too" in said["filter.butterworth"]
