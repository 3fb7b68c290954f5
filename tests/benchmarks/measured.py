"""What the benchmarks share: times in turn, their spread, and processes that are looked at."""

import json
import os
import resource
import statistics
import subprocess
import sys
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

_MB = 1e6
_HERE = Path(__file__).parent


@dataclass(frozen=True)
class Spread:
    """Smallest, middle and largest of what several rounds gave."""

    low: float
    median: float
    high: float

    @classmethod
    def of(cls, values: Iterable[float]) -> "Spread":
        """Return the spread of some numbers, at least one."""
        known = sorted(values)
        return cls(known[0], statistics.median(known), known[-1])


@dataclass(frozen=True)
class Timed:
    """A process that has ended well.

    Attributes
    ----------
    cpu_s : of it and of the processes it started.
    peak_mb : the most resident memory of any one of them.
    """

    wall_s: float
    cpu_s: float
    peak_mb: float
    text: str

    @property
    def json(self) -> Any:
        """The last line that it printed, read as JSON."""
        return json.loads(self.text.splitlines()[-1])


def timed(command: Sequence[str | Path]) -> Timed:
    """Run a command and return what it took.

    Raises
    ------
    RuntimeError
        When it fails; what it wrote is in the message.
    """
    env = {**os.environ, "PYTHONPATH": _with_tests()}
    said, pipe = os.pipe()
    words = [str(part) for part in command]
    # One pipe for both streams, read to its end: one that nobody reads would block, and be timed.
    with subprocess.Popen(
        [sys.executable, "-S", str(_HERE / "launched.py"), str(pipe), *words],
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
        env=env,
        pass_fds=(pipe,),
    ) as process:
        os.close(pipe)
        assert process.stdout is not None
        text = process.stdout.read()
        with os.fdopen(said, encoding="utf-8") as file:
            took = file.read()
    if not took:
        raise RuntimeError(f"{words} could not be started: {text}")
    known = json.loads(took)
    if known["code"]:
        raise RuntimeError(f"{words} ended with {known['code']}: {text}")
    return Timed(known["wall_s"], known["cpu_s"], _peak_mb(known["peak"]), text)


def own_peak_mb() -> float:
    """Return the most memory that this process has had resident."""
    return _peak_mb(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)


def _peak_mb(most: int) -> float:
    return most * (1 if sys.platform == "darwin" else 1024) / _MB


def child(module: str, *arguments: str | Path | float) -> Timed:
    """Run a module of this folder in a process of its own."""
    return timed([sys.executable, "-m", f"benchmarks.{module}", *map(str, arguments)])


def command(*arguments: str | Path | int) -> Timed:
    """Run ``waveassay`` as a user does."""
    script = Path(sys.executable).with_name("waveassay")
    start = [str(script)] if script.exists() else [sys.executable, "-m", "waveassay"]
    return timed([*start, *map(str, arguments)])


def in_turn(ways: Mapping[str, Callable[[], Timed]], rounds: int) -> dict[str, list[Timed]]:
    """Run every way once a round, so that what slows the machine slows all of them."""
    found: dict[str, list[Timed]] = {name: [] for name in ways}
    for _ in range(rounds):
        for name, way in ways.items():
            found[name].append(way())
    return found


def ratios(some: Iterable[float], others: Iterable[float]) -> Spread:
    """Return the spread of ratios, each within one round."""
    return Spread.of(a / b for a, b in zip(some, others, strict=True))


def _with_tests() -> str:
    """Return the search path of a child: what is set already, behind the folder of tests."""
    known = os.environ.get("PYTHONPATH")
    return os.pathsep.join([str(_HERE.parent), *([known] if known else [])])
