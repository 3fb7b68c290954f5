"""The page of results: written from what was measured, and from nothing else."""

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from benchmarks import example_run, plain_chain, reader, second_run, start_up
from benchmarks.measured import Spread


@dataclass(frozen=True)
class Row:
    """One line of a table; ``limit`` in the unit shown, None where no target is set."""

    what: str
    spread: Spread
    unit: str = ""
    limit: float | None = None

    @property
    def verdict(self) -> str:
        """Whether the target is met: always, as a rule, or not."""
        if self.limit is None:
            return "none set"
        if self.spread.high <= self.limit:
            return "met"
        return "median met" if self.spread.median <= self.limit else "**not met**"

    @property
    def cells(self) -> list[str]:
        """What stands in the table: with target and verdict where there is a target."""
        unit = f" {self.unit}" if self.unit else ""
        s = self.spread
        measured = f"{number(s.median)} ({number(s.low)} to {number(s.high)}){unit}"
        if self.limit is None:
            return [self.what, measured]
        return [self.what, f"at most {self.limit:g}{unit}", measured, self.verdict]


def number(value: float) -> str:
    """Return three digits of a number."""
    return f"{value:.3g}" if abs(value) < 1000 else f"{value:.0f}"


def page(found: Mapping[str, Any], machine: Mapping[str, str], date: str) -> str:
    """Return the whole page in Markdown."""
    facts = {
        "hours": f"{found['reader']['hours']:g}",
        "signals": str(found["reader"]["signals"]),
        "recordings": str(found["second_run"]["recordings"]),
        "length_s": str(found["second_run"]["length_s"]),
        "chain_hours": f"{found['plain_chain']['hours']:g}",
        "rate_hz": str(found["plain_chain"]["rate_hz"]),
        "minutes": f"{found['took_s'] / 60:.0f}",
        "date": date,
        "first_s": number(found["second_run"]["first_s"]),
        "tasks": f"{found['second_run']['tasks']:,}",
        "apart": f"{found['plain_chain']['largest_relative_difference']:.1e}",
        "tolerance": f"{plain_chain.TOLERANCE:g}",
        "compared": f"{found['plain_chain']['numbers_compared']:,}",
        "targets": table(target_rows(found), targets=True),
        "more": table(more_rows(found), targets=False),
        "machine": "\n".join(f"- {name}: {value}" for name, value in machine.items()),
        "loads": ", ".join(f"{load:.1f}" for load in found["loads"]),
    }
    return _PAGE.format(**facts)


def table(rows: Iterable[Row], *, targets: bool) -> str:
    """Return rows as a table; all of them have a target, or none has."""
    heads = ["what", "target", "median (least to most)", "target met"]
    shown = heads if targets else [heads[0], heads[2]]
    lines = [shown, ["---"] * len(shown), *(row.cells for row in rows)]
    return "\n".join(f"| {' | '.join(line)} |" for line in lines)


def target_rows(found: Mapping[str, Any]) -> Iterator[Row]:
    """Yield what has a target."""
    for kind, limit in reader.TARGETS.items():
        known = found["reader"][kind]
        yield Row(f"decode all of {kind} / plain read", known["decode_all_ratio"], "", limit)
        growth = known["memory_growth_mb"]
        yield Row(f"growth of memory meanwhile, {kind}", growth, "MB", reader.MEMORY_TARGET_MB)
    for name, words in (("help", "`waveassay --help`"), ("check", "`waveassay check`")):
        yield Row(words, found["start_up"]["wall_s"][name], "s", start_up.TARGETS_S[name])
    wall = found["example"]["wall_s"]["two_workers"]
    yield Row("the example, two workers", wall, "s", example_run.TARGET_S)
    again = found["second_run"]["again_s"]
    yield Row("identical second run", again, "s", second_run.TARGET_S)


def more_rows(found: Mapping[str, Any]) -> Iterator[Row]:
    """Yield what else was measured."""
    start, example, second = found["start_up"], found["example"], found["second_run"]
    chain = found["plain_chain"]
    for kind in reader.TARGETS:
        known = found["reader"][kind]
        yield Row(f"decode two signals of {kind} / plain read", known["decode_two_ratio"])
    yield Row("`python -c pass`", start["wall_s"]["python"], "s")
    yield Row('`python -c "import numpy"`', start["wall_s"]["numpy"], "s")
    for name, words in (("help", "`--help`"), ("check", "`check`")):
        yield Row(f"{words} / `python -c pass`", start["to_python"][name])
        yield Row(f'{words} / `python -c "import numpy"`', start["to_numpy"][name])
    yield Row("the example, one worker", example["wall_s"]["one_worker"], "s")
    yield Row("the example, in process", example["wall_s"]["in_process"], "s")
    yield Row("the backend's own, wall: one worker - in process", example["backend_s"], "s")
    yield Row("the backend's own, share of one worker's wall", example["backend_share"])
    yield Row("the backend's own, CPU: one worker - in process", example["backend_cpu_s"], "s")
    yield Row("one worker / two workers", example["second_worker"])
    yield Row(
        "the example, two workers, CPU of all processes", example["cpu_s"]["two_workers"], "s"
    )
    yield Row("its largest process", example["peak_mb"]["two_workers"], "MB")
    yield Row("identical second run / first run", second["again_ratio"])
    yield Row("run with one recording more", second["added_s"], "s")
    yield Row("run with one recording more / first run", second["added_ratio"])
    yield Row("plain chain: recipe / script, CPU", chain["ratio"])
    yield Row("plain chain: the recipe's jobs alone / script, CPU", chain["jobs_ratio"])
    yield Row("plain chain: recipe, CPU", chain["cpu_s"]["recipe"], "s")
    yield Row("plain chain: script, CPU", chain["cpu_s"]["script"], "s")
    yield Row("plain chain: recipe, peak memory", chain["peak_mb"]["recipe"], "MB")
    yield Row("plain chain: script, peak memory", chain["peak_mb"]["script"], "MB")


_PAGE = """\
# Speed and memory

Written by the one command that measures all of it (about {minutes} min on this machine), {date}:

```sh
python tests/benchmarks/run.py --page
```

Without `--page` the page is printed only; `--quick` is a short form of under a minute, to see that
it works. It makes its own data in a temporary folder and leaves nothing there.

## Targets

{targets}

*met*: by every round. *median met*: by half of the rounds or more, but not by all.

## What else was measured

{more}

## What stands behind the lines

- **Reader.** {signals} signals at 512 Hz, {hours} h, EDF (16 bits) and BDF (24 bits), all samples
  to float64 in the signal's unit, block by block; against `readinto` of the same file with a buffer
  of 1 MiB. The file is in the system's cache: a disk would make the ratio smaller. Growth of memory
  is that of a fresh process's peak while it decodes, its libraries being loaded already.
- **Start-up.** Whole processes, wall. `check` is given the example's recipe and no recordings.
- **The example.** `waveassay run` on a fresh copy of `workdir_example/` without a store, whole
  processes, wall. *In process* is the same command with the same jobs as for one worker, done one
  after another in its own process. What one worker takes longer is **the backend's own**: importing
  Snakemake, its graph and scheduler, and a worker process that imports the libraries again, less
  what of this runs beside other work on the second core.
- **Second run.** {recordings} recordings of {length_s} s and one signal, through the recipe of
  the plain chain. The first run ({tasks} tasks) took {first_s} s, and is made once. *Identical*:
  the same command, nothing to compute. *One recording more*: a new run folder for all, with one
  recording computed and the others taken from the store.
- **Plain chain.** {chain_hours} h of one signal at {rate_hz} Hz: Butterworth 0.5 to 40 Hz both
  ways, 128 Hz, amplitude, epochs of 4 s that overlap by half, multitaper, two relative band powers,
  spectral edge. The script (`plain_script.py`) does the same on the whole array with numpy and
  scipy, shares no code with the stages, and keeps no proof of anything. CPU seconds of one process
  each, without imports. The recipe's include checking, the file's digest, the store and the run
  folder; its *jobs alone* leave out checking, planning and the run folder. The largest relative
  difference of the features over all kept epochs was {apart} ({compared} numbers); the tests ask
  for {tolerance}.

## The machine

{machine}

## Noise

Everything is measured in turn within a round, so that what slows the machine slows both sides, and
a ratio is taken within its round. Seconds are this machine's; ratios carry over better, and the one
to numpy's import best. The spread is over rounds of one run of this command: from day to day, and
with neighbours on a virtual machine, medians move by more than the spread shows. Processes that
wanted a core (average of a minute), before the first part and after each of the five:
{loads}. The measurement itself is one of them, or two to three during the example;
more is somebody else's, and then wall seconds are too long.
"""
