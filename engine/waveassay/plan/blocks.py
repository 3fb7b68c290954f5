"""The fixed grid of blocks in which a fused group is applied, from the start of a piece.

A block is a sixth, a third or a whole of a stretch, by how far the group reaches, and blocks lie
where stretches do; which block gives a sample that is kept depends on neither. All is counted in
steps of the grid of stretches.
"""

from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property
from math import ceil

from waveassay.plan.stretches import STRETCH_S

#: The reach to both sides up to which blocks have each length, s: what is read twice is to cost
#: less than what a longer transform, which leaves a core's memory, costs more (measured).
LENGTHS_S = ((Fraction(75), Fraction(150)), (Fraction(300), Fraction(300)))
#: A longer reach has whole stretches as blocks: more of one would be made and thrown away.
LONGEST_S = STRETCH_S
#: How far the steps that follow may look beyond a block's borders without another block, as a
#: share of its length.
MARGIN = Fraction(1, 50)

Span = tuple[int, int]


def lengths_s(reach_s: Fraction) -> tuple[Fraction, ...]:
    """Return lengths of blocks for a group with this reach to both sides in all, the best first.

    Shorter ones cost more, and need less memory.
    """
    shorter = [length_s for most_s, length_s in LENGTHS_S if most_s < reach_s]
    fitting = [length_s for most_s, length_s in LENGTHS_S if reach_s <= most_s]
    return ((*fitting, LONGEST_S)[0], *reversed(shorter))


@dataclass(frozen=True)
class BlockGrid:
    """Blocks in steps of ``step_s``: block k begins at the last one by k * ``length_s``."""

    step_s: Fraction
    length_s: Fraction

    @cached_property
    def _ratio(self) -> tuple[int, int]:
        """How many steps so many blocks are, in whole numbers: fractions take far longer."""
        return (self.length_s / self.step_s).as_integer_ratio()

    @cached_property
    def margin(self) -> int:
        """How far a block is right beyond its two borders."""
        return ceil(MARGIN * self.length_s / self.step_s)

    def border(self, number: int) -> int:
        """Return where block ``number`` begins."""
        return number * self._ratio[0] // self._ratio[1]

    def reads(self, reach: int) -> int:
        """Return how much of its input every block reads, for a reach to both sides in all."""
        return ceil(self.length_s / self.step_s) + 2 * self.margin + reach

    def covering(self, span: Span, own: Span) -> range:
        """Return the blocks that give a span, of which ``own`` is kept.

        What is kept comes from the block it lies in. What lies around it, and only serves the
        steps that follow, may come from the margin of the first block and of the last.
        """
        first = min(self._last_begun(own[0]), self._last_begun(span[0] + self.margin))
        stop = max(self._first_over(own[1]), self._first_over(span[1] - self.margin))
        return range(first, max(first + 1, stop))

    def _last_begun(self, at: int) -> int:
        """Return the last block with a border at or before a moment."""
        steps, blocks = self._ratio
        return max(0, -(-(at + 1) * blocks // steps) - 1)

    def _first_over(self, at: int) -> int:
        """Return the first block with a border at or after a moment."""
        steps, blocks = self._ratio
        return -(-at * blocks // steps)
