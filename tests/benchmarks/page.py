"""The page of results: written from what was measured, and from nothing else.

The README's table is made from the page, so that the two cannot differ.
"""

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from benchmarks import plain_chain
from benchmarks.full_rows import full_facts
from benchmarks.page_rows import more_rows, target_rows
from benchmarks.rows import markdown, number, table

PAGE = Path(__file__).with_name("README.md")
README = Path(__file__).parents[2] / "README.md"
BEGIN = "<!-- from tests/benchmarks/README.md, by tests/benchmarks/run.py --page -->\n\n"
END = "\n<!-- end -->\n"


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
        **full_facts(found),
        "machine": "\n".join(f"- {name}: {value}" for name, value in machine.items()),
        "loads": ", ".join(f"{load:.1f}" for load in found["loads"]),
    }
    return _PAGE.format(**facts)


def short(page: str) -> str:
    """Return the page's targets as the README shows them: what, target, median."""
    lines = page.partition("## Targets")[2].partition("*met*")[0].strip().splitlines()
    cells = [line.strip("| ").split(" | ") for line in lines[2:]]
    rows = [[what, target, _median(measured)] for what, target, measured, _ in cells]
    return markdown([["what", "target", "measured"], *rows]) + "\n"


def _median(measured: str) -> str:
    """Take the spread out of ``3.4 (3 to 4) s``."""
    value, _, rest = measured.partition(" (")
    return value + rest.partition(")")[2]


def shown_in_readme(readme: str) -> str:
    """Return the table that the README has."""
    return readme.partition(BEGIN)[2].partition(END)[0]


def with_table(readme: str, page: str) -> str:
    """Return the README with the page's table in place of the one it has."""
    before, begin, rest = readme.partition(BEGIN)
    _, end, after = rest.partition(END)
    if not end:
        raise ValueError("the README has no place for the table of benchmarks")
    return f"{before}{begin}{short(page)}{end}{after}"


_PAGE = """\
# Speed and memory

Written by the one command that measures all of it (about {minutes} min on this machine), {date}:

```sh
python tests/benchmarks/run.py --page
```

Without `--page` the page is printed only; `--quick` is a short form of two minutes, to see that it
works; `--gate` is the short form that `.ci/run` holds against the targets. It makes its own data in
a temporary folder and leaves nothing there.

![What the whole chain costs](cost.png)

## Targets

{targets}

*met*: by every round. *median met*: by half of the rounds or more, but not by all. *excellent*:
met by every round, and half of the rounds or more are excellent.

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
  Snakemake, its graph and scheduler, and a process that imports the libraries again, from which
  workers are forked, less what of this runs beside other work on the second core.
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
- **Whole chain.** {full_channels} channels at 512 Hz, {full_hours} h, EDF of {full_size} MB:
  Butterworth 0.5 to 40 Hz both ways, notch 50 Hz, 128 Hz, amplitude, epochs of 4 s that overlap by
  half, Welch (2 s), multitaper (NW 3, 5 tapers), ten band powers, three edges, entropy
  (`full_recipe.py`). *Ours* is `waveassay run` with Snakemake, from an empty store: all processes,
  from start to end; as users give it, with a worker a core, unless *one worker* is said. The
  *scripts* (`full_script.py`) do the same by hand with numpy
  and scipy, in loops over channels and epochs or on whole arrays, and write a CSV file. They find
  the same: powers and shares of epochs in mid recording differed by at most {full_apart}
  ({full_tolerance} allowed; they resample with scipy's own kernel, which is shorter).
- **Bound** (`full_bound.py`). The bytes read and converted once, the transforms that no way can do
  without (blocks of 65,536 samples, Welch's segments once, each epoch by each taper), a pass over
  the spectra, the numbers written. *Standard* precision filters in float64 and transforms epochs
  in float32, *double* is float64 throughout, *single* float32 throughout. *Without start*: less
  the CPU time of the same recipe on {full_short_s} s of as many channels. What no precision is
  named for is {full_default}.
- **Largest error of a bin.** Of any bin of any kept epoch, 0.5 to 40 Hz, relative to that bin of
  the textbook's chain: the steps one after another on the whole recording, in float64.
- **Long recordings** ({full_long}). Wall of the command, and of its processes the one with most
  memory. Its seconds were set on another machine, where they are five times the bound, of which the
  ratio tells on this one.{full_cut}
- **Many recordings** (`many_recordings.py`). Of 20 s and two signals, each with other samples. The
  plan is made in a process of its own, from known headers to what workers are handed. *One
  recording more* makes a new run folder for all; what the same command takes on that recording
  alone is subtracted.
- **Share of CPU** (`full_stages.py`). A run in process, its functions clocked.
- **The backend's own, by recordings** (`backend_own.py`). Recordings of 30 s through the recipe of
  the plain chain by one worker: wall with Snakemake less wall in process.

## The machine

{machine}

## Noise

Everything is measured in turn within a round, so that what slows the machine slows both sides, and
a ratio is taken within its round. Seconds are this machine's; ratios carry over better, and the one
to numpy's import best. The spread is over rounds of one run of this command: from day to day, and
with neighbours on a virtual machine, medians move by more than the spread shows. Processes that
wanted a core (average of a minute), before the first part and after each:
{loads}. The measurement itself is one of them, or two to three during the example;
more is somebody else's, and then wall seconds are too long.
"""
