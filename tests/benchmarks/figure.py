"""The figure beside the page: what the whole chain costs, and where it goes."""

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from benchmarks import full_sizes

# Told apart by lightness and by shape, for eyes that see no colours and for paper.
_STYLE = {
    "vectorised": ("script on whole arrays", "#999999", "s"),
    "ours": ("waveassay, one worker", "#1b5e9e", "o"),
    "bound": ("the least work possible", "#000000", "^"),
}


def draw(found: Mapping[str, Any], path: Path) -> None:
    """Draw four panels and write them as PNG; the same numbers give the same bytes."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(9, 6.4), dpi=100, layout="constrained")
    cost, cores, stages, backend = figure.subplots(2, 2).ravel()
    _cost(cost, found)
    _cores(cores, found)
    _stages(stages, found)
    _backend(backend, found)
    for axes in (cost, cores, stages, backend):
        axes.spines[["top", "right"]].set_visible(False)
        axes.title.set_fontsize(10)
    figure.savefig(path, metadata={"Software": None})


def _cost(axes: Any, found: Mapping[str, Any]) -> None:
    for way, points in full_sizes.points(dict(found)).items():
        label, colour, marker = _STYLE[way]
        axes.plot(*zip(*points, strict=True), color=colour, marker=marker, label=label)
    axes.set(
        xscale="log",
        yscale="log",
        xlabel="hours x channels x rate (million samples)",
        ylabel="CPU time, start included (s)",
        title="Whole chain",
    )
    axes.legend(frameon=False, fontsize=8)


def _cores(axes: Any, found: Mapping[str, Any]) -> None:
    for k, long in enumerate(found["full_long"]):
        gain = long["speed_up"].median
        label = f"{long['hours']:g} h x {long['channels']} channels"
        style = ("#1b5e9e", "o") if k else ("#999999", "s")
        axes.plot([1, 2], [1, gain], color=style[0], marker=style[1], label=label)
        axes.annotate(f"{gain:.2f}", (2, gain), xytext=(5, -3), textcoords="offset points")
    axes.plot([1, 2], [1, 2], color="black", linestyle=":", label="perfect")
    axes.set(
        xticks=[1, 2], xlim=(0.9, 2.2), xlabel="workers", ylabel="times faster", title="Speed-up"
    )
    axes.legend(frameon=False, fontsize=8)


def _stages(axes: Any, found: Mapping[str, Any]) -> None:
    shares = {part: 100 * spread.median for part, spread in found["full_stages"].items()}
    parts = list(shares)[::-1]
    bars = axes.barh(parts, [shares[part] for part in parts], color="#1b5e9e")
    axes.bar_label(bars, fmt="%.0f", padding=3, fontsize=8)
    axes.set(xlabel="share of CPU time, start excluded (%)", title="Where the time goes")
    axes.tick_params(axis="y", labelsize=8)


def _backend(axes: Any, found: Mapping[str, Any]) -> None:
    known = found["backend_own"]
    count = [one["recordings"] for one in known]
    for key, label, colour, marker in (
        ("snakemake", "with the backend", "#1b5e9e", "o"),
        ("in_process", "in process", "#999999", "s"),
        ("own_s", "the backend's own", "#000000", "^"),
    ):
        axes.plot(count, [one[key] for one in known], color=colour, marker=marker, label=label)
    axes.axhline(0, color="#cccccc", linewidth=0.8, zorder=0)  # a difference may be below it
    axes.set(
        xscale="log",
        xlabel="recordings of 30 s",
        ylabel="wall time (s)",
        title="The backend, one worker",
    )
    axes.legend(frameon=False, fontsize=8)
