"""Where text for people goes."""

from functools import lru_cache
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from rich.console import Console

NOTICE = "For research only; not for monitoring, nor for decisions about a patient."


@lru_cache(maxsize=2)
def console(*, stderr: bool = False) -> "Console":
    """Return the screen. Lines are not wrapped where they go to a file or another program."""
    from rich.console import Console

    screen = Console(stderr=stderr, highlight=False, markup=False, emoji=False, soft_wrap=True)
    return screen


def plural(count: int, one: str, many: str | None = None) -> str:
    """Return a count with its word: ``1 recording``, ``2 recordings``."""
    return f"{count:,} {one if count == 1 else many or one + 's'}"
