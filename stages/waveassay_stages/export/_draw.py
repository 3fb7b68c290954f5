"""The canvas of every figure: one style whatever the user's own settings, and fixed bytes.

All margins are constants, in pixels, so that a figure is laid out and drawn only once.
"""

import warnings
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from io import BytesIO
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.axis import Axis
    from matplotlib.figure import Figure

WIDTH, HEIGHT, DPI = 1600, 800, 160
LEFT, BOTTOM, TOP = 140, 88, HEIGHT - 54  # borders of the axes
TITLE, NOTE = 12.0, 8.5  # font sizes, points

INK = "#262626"
QUIET = "#6b6b6b"

_STYLE: dict[Any, Any] = {
    "font.family": "DejaVu Sans",  # comes with matplotlib, so it is the same everywhere
    "font.size": 10,
    "axes.labelsize": 10.5,
    "axes.edgecolor": QUIET,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.8,
    "text.color": INK,
    "text.parse_math": False,  # a signal's name may hold a dollar sign
    "xtick.color": QUIET,
    "ytick.color": QUIET,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "hatch.linewidth": 0.6,
}

_CHARACTER = 0.7  # average width of a character by font size, as in a name in capitals
# Measured on typical figures: level 6 packs for half as long again and saves a tenth of the bytes.
_COMPRESS_LEVEL = 3


@contextmanager
def canvas() -> Iterator["Figure"]:
    """Yield an empty figure; a user's own matplotlib settings do not reach it."""
    import matplotlib
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    with matplotlib.rc_context(), warnings.catch_warnings():
        matplotlib.rcdefaults()
        matplotlib.rcParams.update(_STYLE)
        # A name in a script that the font lacks is drawn with boxes; that is no failure.
        warnings.filterwarnings("ignore", "Glyph .* missing from font")
        figure = Figure(figsize=(WIDTH / DPI, HEIGHT / DPI), dpi=DPI)
        FigureCanvasAgg(figure)
        yield figure


def png(figure: "Figure") -> bytes:
    """Return the picture's bytes: nothing transparent, and no date or versions that differ."""
    from PIL import Image

    canvas: Any = figure.canvas  # not typed as the one that holds pixels
    canvas.draw()
    target = BytesIO()
    picture = Image.fromarray(np.asarray(canvas.buffer_rgba())[..., :3])
    picture.save(target, "png", dpi=(DPI, DPI), compress_level=_COMPRESS_LEVEL)
    return target.getvalue()


def axes_at(figure: "Figure", left: int, bottom: int, right: int, top: int) -> "Axes":
    """Add axes with these borders, in pixels from the lower left corner."""
    return figure.add_axes(
        (left / WIDTH, bottom / HEIGHT, (right - left) / WIDTH, (top - bottom) / HEIGHT)
    )


def rule(axis: "Axis", name: str, most: int = 8) -> None:
    """Name an axis and give it round ticks, at most ``most`` steps of them."""
    from matplotlib.ticker import MaxNLocator, ScalarFormatter

    formatter = ScalarFormatter(useOffset=False)  # numbers in full
    formatter.set_scientific(False)
    axis.set_label_text(name)
    axis.set_major_locator(MaxNLocator(nbins=most, steps=[1, 2, 2.5, 5, 10]))
    axis.set_major_formatter(formatter)


_BETWEEN = 30  # pixels between a title and its note


def unit_label(unit: str) -> str:
    """Return a unit as it is printed on an axis: ``uV`` with a micro sign."""
    return "µ" + unit[1:] if unit.startswith("u") and len(unit) > 1 else unit


def reference_label(unit: str) -> str:
    """Return the reference of a density in decibels: ``dB re 1 µV²/Hz``."""
    shown = unit_label(unit)
    return f"dB re 1 {shown if unit.isalpha() else f'({shown})'}²/Hz"


def width_of(text: str, size: float) -> float:
    """Return about how many pixels a text takes; ``size`` in points."""
    return len(text) * _CHARACTER * size * DPI / 72


def shortened(text: str, length: int) -> str:
    """Return a text of at most ``length`` characters, its middle replaced by an ellipsis.

    Names that belong together mostly differ at their ends. Spaces around it take no room.
    """
    text = text.strip()
    if len(text) <= length:
        return text
    tail = (length - 1) // 3
    return text[: length - 1 - tail].rstrip() + "…" + text[len(text) - tail :].lstrip()


def fitted(text: str, room: float, size: float) -> str:
    """Return a text shortened to about ``room`` pixels; empty where three characters are cut."""
    length = int(room / width_of("x", size))
    return shortened(text, length) if length >= min(4, len(text.strip())) else ""


def title(figure: "Figure", name: str, note: str, right: int = WIDTH) -> None:
    """Write what the picture is of on top, and a note that ends at ``right``."""
    height = (TOP + 20) / HEIGHT
    beside = figure.text(right / WIDTH, height, note, fontsize=NOTE, color=QUIET, ha="right")
    shown = figure.text(LEFT / WIDTH, height, name, fontsize=TITLE, fontweight="bold")
    limit = beside.get_window_extent().x0 - _BETWEEN
    length = len(name)
    while shown.get_window_extent().x1 > limit and length > 4:
        length -= 1
        shown.set_text(shortened(name, length))


def message(name: str, what: str, text: Sequence[str]) -> bytes:
    """Return a picture that says why there is nothing to see."""
    with canvas() as figure:
        title(figure, name, what, WIDTH - 40)
        shown = "\n".join(text)
        figure.text(0.5, 0.5, shown, fontsize=13, color=QUIET, ha="center", linespacing=1.6)
        return png(figure)
