"""Which part of a run's CPU time each stage takes: a run in process, its functions clocked.

Run as ``python -m benchmarks.full_stages RECIPE RECORDING INTO`` in a process of its own, since the
functions are exchanged for clocked ones. Time in a function that another one calls is its own.
"""

import json
import sys
import tempfile
import time
from collections import defaultdict
from collections.abc import Callable, Iterator, Sequence
from functools import wraps
from importlib import import_module
from inspect import isgeneratorfunction
from pathlib import Path
from types import FunctionType, ModuleType
from typing import Any

from benchmarks import full_data, full_recipe, in_process
from benchmarks.measured import Spread, child

REST = "digests, plan, run folder"
_FILTERING = "filter and resample"
#: Where a part's time goes that is not a stage's: all of a module, or one function of it.
CLOCKED = {
    "waveassay.execute.signals:read_from_file": "read",
    "waveassay.execute.fused:run_unit": _FILTERING,
    "waveassay.execute.arrays": "store",
    "waveassay.execute.store": "store",
    "waveassay.execute.finish:finish": "tables",
}
#: A step's time goes to what its name begins with.
BY_STAGE = {
    "filter.": _FILTERING,
    "resample": _FILTERING,
    "exclude.": "mask, epochs",
    "epoch.": "mask, epochs",
    "spectrum.welch": "Welch",
    "spectrum.multitaper": "multitaper",
    "feature.": "features",
}
PARTS = tuple(dict.fromkeys([*CLOCKED.values(), *BY_STAGE.values(), REST]))


def measure(channels: int, length_s: int, rounds: int) -> dict[str, Spread]:
    """Return the share of each part in CPU time."""
    found: dict[str, list[float]] = {part: [] for part in PARTS}
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        path = full_data.write(folder / "long.edf", channels, length_s)
        recipe = folder / "recipe.yaml"
        recipe.write_text(full_recipe.chain(full_recipe.DEFAULT), encoding="utf-8")
        for number in range(rounds):
            seconds = child("full_stages", recipe, path, folder / f"into{number}").json
            for part, values in found.items():
                values.append(seconds[part] / sum(seconds.values()))
    return {part: Spread.of(values) for part, values in found.items()}


class Clock:
    """CPU seconds by part; what a clocked function calls is not its own."""

    def __init__(self) -> None:
        self.seconds: dict[str, float] = defaultdict(float)
        self._inside = [0.0]

    def clocked(self, function: Callable[..., Any], part_of: Callable[..., str]) -> Any:
        """Return the function, clocked; its arguments say what part it belongs to."""

        @wraps(function)
        def timed(*arguments: Any, **named: Any) -> Any:
            self._inside.append(0.0)
            start_s = time.process_time()
            try:
                return function(*arguments, **named)
            finally:
                took_s = time.process_time() - start_s
                self.seconds[part_of(*arguments)] += took_s - self._inside.pop()
                self._inside[-1] += took_s

        return timed


def clock_all(clock: Clock) -> None:
    """Exchange the functions, wherever a module of the engine has them by name."""
    for place, part in CLOCKED.items():
        for holder, name in _functions(place):
            _exchange(clock, holder, name, lambda *_, part=part, **__: part)
    for holder, name in _functions("waveassay.execute.moves:run_move"):
        _exchange(clock, holder, name, _part_of_move)


def _part_of_move(move: Any, *_: Any) -> str:
    name = move.step.stage.name
    return next((part for start, part in BY_STAGE.items() if name.startswith(start)), REST)


def _functions(place: str) -> Iterator[tuple[Any, str]]:
    """Yield what is clocked: a named function, or each that a module or its classes define."""
    module_name, _, name = place.partition(":")
    module = import_module(module_name)
    if name:
        yield module, name
        return
    own = [m for m in vars(module).values() if getattr(m, "__module__", "") == module_name]
    for holder in (module, *(m for m in own if isinstance(m, type))):
        for known, member in list(vars(holder).items()):
            special = known.startswith("__") and known != "__init__"
            plain = isinstance(member, FunctionType) and not isgeneratorfunction(member)
            if plain and not special and member.__module__ == module_name:
                yield holder, known


def _exchange(clock: Clock, holder: Any, name: str, part_of: Callable[..., str]) -> None:
    known = getattr(holder, name)
    clocked = clock.clocked(known, part_of)
    setattr(holder, name, clocked)
    if not isinstance(holder, ModuleType):
        return
    for module in [m for n, m in sys.modules.items() if n.split(".")[0] == "waveassay"]:
        if getattr(module, name, None) is known:
            setattr(module, name, clocked)


def main(arguments: Sequence[str]) -> None:
    """Run once to warm up on a short recording, once clocked, and print seconds by part."""
    recipe, path, into = map(Path, arguments)
    text = recipe.read_text(encoding="utf-8")
    with tempfile.TemporaryDirectory() as place:
        short = full_data.write(Path(place, "short.edf"), 1, 8)
        in_process.run(text, short, Path(place, "into"))
    clock = Clock()
    clock_all(clock)
    all_s = in_process.run(text, path, into)["all_s"]
    seconds = {part: clock.seconds[part] for part in PARTS}
    seconds[REST] = all_s - sum(s for part, s in seconds.items() if part != REST)
    print(json.dumps(seconds))


if __name__ == "__main__":
    main(sys.argv[1:])
