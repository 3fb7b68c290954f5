"""The canvas of every figure: one style, whatever the user's own settings, and fixed bytes."""

import warnings
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from io import BytesIO
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

WIDTH_IN, HEIGHT_IN, DPI = 10.0, 5.0, 160

INK = "#262626"
QUIET = "#6b6b6b"
EXCLUDED_FACE, EXCLUDED_LINES = "#ededed", "#a3a3a3"

# Distinct for the common colour deficiencies, and in lightness, so that they survive greyscale.
LINE_COLOURS = ("#1b4f8a", "#c8501e", "#3f8f5b", "#8c3b7a", "#b58900", "#4c9fc4", "#5b5b5b")
LINE_STYLES = ("-", (0, (6, 2)), (0, (2, 1.5)), (0, (7, 2, 1.5, 2)))
STRIP_COLOURS = ("#dbe4ee", "#f0dfd3", "#dcebe0", "#e8dce6", "#eee6cc", "#dcebf2", "#e4e4e4")

_STYLE: dict[Any, Any] = {
    "font.family": "DejaVu Sans",  # comes with matplotlib, so it is the same everywhere
    "font.size": 10,
    "axes.titlesize": 12,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "axes.labelsize": 10.5,
    "axes.edgecolor": QUIET,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.8,
    "axes.unicode_minus": True,
    "text.color": INK,
    "text.parse_math": False,  # a signal's name may hold a dollar sign
    "xtick.color": QUIET,
    "ytick.color": QUIET,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "hatch.linewidth": 0.6,
    "legend.frameon": False,
    "legend.fontsize": 9.5,
}


@contextmanager
def canvas() -> Iterator["Figure"]:
    """Yield an empty figure; a user's own matplotlib settings do not reach it."""
    import matplotlib
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure
    from matplotlib.layout_engine import ConstrainedLayoutEngine

    with matplotlib.rc_context():
        matplotlib.rcdefaults()
        matplotlib.rcParams.update(_STYLE)
        layout = ConstrainedLayoutEngine(w_pad=0.12, h_pad=0.06, hspace=0.0)
        figure = Figure(figsize=(WIDTH_IN, HEIGHT_IN), dpi=DPI, layout=layout)
        FigureCanvasAgg(figure)
        with warnings.catch_warnings():
            # A name in a script that the font lacks is drawn with boxes; that is no failure.
            warnings.filterwarnings("ignore", "Glyph .* missing from font")
            yield figure


def png(figure: "Figure") -> bytes:
    """Return the picture's bytes, without the date and versions that would make them differ."""
    target = BytesIO()
    figure.savefig(target, format="png", dpi=DPI, metadata={"Software": None})
    return target.getvalue()


def unit_label(unit: str) -> str:
    """Return a unit as it is printed on an axis: ``uV`` with a micro sign."""
    return "µ" + unit[1:] if unit.startswith("u") and len(unit) > 1 else unit


def reference_label(unit: str) -> str:
    """Return the reference of a density in decibels: ``dB re 1 µV²/Hz``."""
    shown = unit_label(unit)
    return f"dB re 1 {shown if unit.isalpha() else f'({shown})'}²/Hz"


def shortened(text: str, length: int) -> str:
    """Return a text of at most ``length`` characters, its end replaced by an ellipsis."""
    return text if len(text) <= length else text[: length - 1] + "…"


def title(axes: "Axes", signal: str, what: str) -> None:
    """Write the signal's name and what is shown above the axes."""
    axes.set_title(f"{shortened(signal, 50)}: {what}", pad=8)


def message(signal: str, what: str, text: Sequence[str]) -> bytes:
    """Return a picture that says why there is nothing to see."""
    with canvas() as figure:
        axes = figure.add_subplot()
        title(axes, signal, what)
        axes.set_xticks([])
        axes.set_yticks([])
        axes.text(
            0.5,
            0.5,
            "\n".join(text),
            ha="center",
            va="center",
            fontsize=13,
            color=QUIET,
            linespacing=1.6,
            transform=axes.transAxes,
        )
        return png(figure)
