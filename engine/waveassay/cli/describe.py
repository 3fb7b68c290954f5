"""``waveassay describe``."""

from collections.abc import Sequence
from itertools import pairwise
from pathlib import Path

from waveassay.cli.screen import console, plural
from waveassay.contract import SignalError
from waveassay.plan.recordings import find_recordings
from waveassay.recording import Facts, read_facts


def describe(arguments: Sequence[Path]) -> int:
    """Print what recordings hold; return 3 when some cannot be read."""
    screen = console()
    failed = 0
    for number, item in enumerate(find_recordings(arguments)):
        if number:
            screen.print("")
        try:
            _describe(item.name, read_facts(item.path))
        except SignalError as error:
            failed += 1
            screen.print(f"{item.name}: cannot be read\n  {error}")
    return 3 if failed else 0


def _describe(name: str, facts: Facts) -> None:
    screen = console()
    start = facts.start.isoformat(sep=" ") if facts.start else "start not known"
    screen.print(f"{name}: {facts.format}, {start}, {float(facts.duration_s):g} s, {facts.path}")
    width = max((len(signal.label) for signal in facts.signals), default=0)
    for signal in facts.signals:
        screen.print(
            f"  {signal.label:{width}}  {float(signal.rate_hz):g} Hz  {signal.unit or 'no unit'}  "
            f"{signal.physical_min:g} to {signal.physical_max:g}"
            + (f"  {signal.prefilter}" if signal.prefilter else "")
        )
    if len(facts.pieces) > 1:
        screen.print(f"  {plural(len(facts.pieces) - 1, 'gap')}:")
        for before, after in pairwise(facts.pieces):
            lost_s = float(after.start_s - before.stop_s)
            screen.print(f"    from {float(before.stop_s):g} s, {lost_s:g} s long")
    if facts.annotations:
        screen.print(f"  {plural(len(facts.annotations), 'annotation')}:")
    for annotation in facts.annotations[:40]:
        length = f" ({float(annotation.duration_s):g} s)" if annotation.duration_s else ""
        screen.print(f"    {float(annotation.onset_s):g} s{length}  {annotation.text}")
    if len(facts.annotations) > 40:
        screen.print(f"    and {len(facts.annotations) - 40} more")
    for warning in facts.warnings:
        screen.print(f"  odd: {warning}")
