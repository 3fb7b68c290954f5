"""Blocks of fused groups: they cover what is wanted, and what is kept comes from its own block."""

from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st

from chains import program_of
from waveassay.plan.blocks import BLOCK_S, BlockGrid
from waveassay.plan.fusing import explained, units_of
from waveassay.plan.stretches import STRETCH_S
from waveassay.plan.windows import Form

steps_s = st.fractions(Fraction(1, 5000), 4, max_denominator=5000).filter(lambda s: s > 0)
BAND = "filter.butterworth: {high_pass: 0.5 Hz}"


@given(steps_s, st.integers(0, 10**6), st.integers(1, 10**5), st.integers(0, 300), st.data())
def test_blocks_cover_a_span_and_hold_what_is_kept(
    step_s: Fraction, low: int, count: int, around: int, data: st.DataObject
) -> None:
    grid = BlockGrid(step_s)
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


@given(steps_s, st.integers(0, 1000))
def test_borders_lie_on_the_grid_and_no_block_is_longer_than_it_reads(
    step_s: Fraction, number: int
) -> None:
    grid = BlockGrid(step_s)
    begins_s = grid.border(number) * step_s
    assert 0 <= number * BLOCK_S - begins_s < step_s
    length = grid.border(number + 1) - grid.border(number)
    assert length + 2 * grid.margin + 17 <= grid.reads(17)


def test_stretches_are_whole_blocks() -> None:
    assert (STRETCH_S / BLOCK_S).denominator == 1


@pytest.mark.parametrize("rate", ["512", "500", "249.98"])
def test_the_usual_steps_that_follow_need_no_more_blocks(rate: str) -> None:
    named = ", nominal_rate: 250 Hz" if rate == "249.98" else ""
    steps = [BAND, f"resample: {{rate: 128 Hz{named}}}"]
    exclude = "exclude.amplitude: {range: 300 uV, window: 1 s}"
    form = Form(program_of([*steps, exclude], rate), 0)
    own = tuple(int(k * STRETCH_S // form.step_s) for k in (3, 4))
    around = form.units[1]
    span = (own[0] - around.before, own[1] + around.after)
    assert len(form.blocks.covering(span, own)) == STRETCH_S / BLOCK_S  # type: ignore[arg-type]


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
