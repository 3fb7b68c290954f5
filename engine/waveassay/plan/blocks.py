"""The fixed grid of blocks in which a fused group is applied, from the start of a piece.

Blocks are a quarter of a stretch, and lie where stretches do; which block gives a sample that is
kept depends on neither. All is counted in steps of the grid of stretches.
"""

from dataclasses import dataclass
from fractions import Fraction
from math import ceil

#: Four blocks a stretch: as many rows of doubles as a transform takes at once.
BLOCK_S = Fraction(150)
#: How far the steps that follow may look beyond a block's borders without another block, s.
MARGIN_S = Fraction(3)

Span = tuple[int, int]


@dataclass(frozen=True)
class BlockGrid:
    """Blocks in steps of ``step_s``: block k begins at the last one at or before k * 150 s."""

    step_s: Fraction

    @property
    def margin(self) -> int:
        """How far a block is right beyond its two borders."""
        return ceil(MARGIN_S / self.step_s)

    def border(self, number: int) -> int:
        """Return where block ``number`` begins."""
        return int(number * BLOCK_S // self.step_s)

    def reads(self, reach: int) -> int:
        """Return how much of its input every block reads, for a reach to both sides in all."""
        return ceil(BLOCK_S / self.step_s) + 2 * self.margin + reach

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
        return max(0, ceil((at + 1) * self.step_s / BLOCK_S) - 1)

    def _first_over(self, at: int) -> int:
        """Return the first block with a border at or after a moment."""
        return ceil(at * self.step_s / BLOCK_S)
