"""Decoding every signal of a long recording, against a plain read of the same file.

Run as a script: ``python tests/benchmarks/reader.py [hours] [rounds]``. Ratios are of medians of
times measured in turn in one run; memory is the growth of a fresh process's peak while it decodes.
"""

import json
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

from waveassay.recording import open_recording

SIGNALS = 64
RATE_HZ = 512
TARGETS = {"EDF": 6.0, "BDF": 12.0}
MEMORY_TARGET_MB = 16.0
_MB = 1e6


def measure(hours: float, rounds: int) -> dict[str, Any]:
    """Return ratios to a plain read, and growth of memory (MB), for EDF and BDF."""
    found: dict[str, Any] = {"signals": SIGNALS, "rate_hz": RATE_HZ, "hours": hours}
    with tempfile.TemporaryDirectory() as folder:
        for kind in ("EDF", "BDF"):
            path = Path(folder, f"long.{kind.lower()}")
            _write(path, kind, records=round(hours * 3600))
            found[kind] = _compare(path, rounds)
            path.unlink()
    return found


def _compare(path: Path, rounds: int) -> dict[str, float]:
    ways: dict[str, Callable[[Path], None]] = {"plain": _plain, "decode": _decode, "two": _two}
    times: dict[str, list[float]] = {name: [] for name in ways}
    for _ in range(rounds):
        for name, way in ways.items():
            start = time.perf_counter()
            way(path)
            times[name].append(time.perf_counter() - start)
    median = {name: statistics.median(values) for name, values in times.items()}
    return {
        "size_mb": path.stat().st_size / _MB,
        "plain_s": median["plain"],
        "decode_all_ratio": median["decode"] / median["plain"],
        "decode_two_ratio": median["two"] / median["plain"],
        "memory_growth_mb": _memory_growth_mb(path),
    }


def _plain(path: Path) -> None:
    buffer = bytearray(1 << 20)
    with path.open("rb", buffering=0) as file:
        while file.readinto(buffer):
            pass


def _decode(path: Path) -> None:
    with open_recording(path) as recording:
        for _ in recording.blocks():
            pass


def _two(path: Path) -> None:
    with open_recording(path) as recording:
        for _ in recording.blocks([3, 40]):
            pass


def _write(path: Path, kind: str, records: int) -> None:
    width, top = (2, 1 << 15) if kind == "EDF" else (3, 1 << 23)
    version = b"0" if kind == "EDF" else b"\xffBIOSEMI"

    def text(*values: tuple[bytes, int]) -> bytes:
        return b"".join(value.ljust(size) for value, size in values)

    main = text(
        (version, 8),
        (b"X", 80),
        (b"X", 80),
        (b"01.03.24", 8),
        (b"22.00.00", 8),
        (b"%d" % (256 * (SIGNALS + 1)), 8),
        (b"", 44),
        (b"%d" % records, 8),
        (b"1", 8),
        (b"%d" % SIGNALS, 4),
    )
    labels = b"".join((b"EEG %d" % i).ljust(16) for i in range(SIGNALS))
    same = ((b"", 80), (b"uV", 8), (b"-3200", 8), (b"3200", 8), (b"%d" % -top, 8))
    rest = (*same, (b"%d" % (top - 1), 8), (b"", 80), (b"%d" % RATE_HZ, 8), (b"", 32))
    own = b"".join(value.ljust(size) * SIGNALS for value, size in rest)
    noise = np.random.default_rng(7)
    size = SIGNALS * RATE_HZ * width
    some = [noise.integers(0, 256, size, np.uint8).tobytes() for _ in range(16)]
    with path.open("wb") as file:
        file.write(main + labels + own)
        for record in range(records):
            file.write(some[record % len(some)])


def _memory_growth_mb(path: Path) -> float:
    """Return how far decoding raises the peak of a process that has decoded nothing before."""
    command = [sys.executable, __file__, "--memory", str(path)]
    return float(subprocess.run(command, check=True, capture_output=True, text=True).stdout)


def _status_mb(key: str) -> float:
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith(key + ":"):
            return int(line.split()[1]) * 1024 / _MB
    raise RuntimeError(f"the kernel does not tell {key}")


def _reset_peak_mb() -> float:
    """Set the peak of resident memory back to what is resident now, and return that."""
    Path("/proc/self/clear_refs").write_text("5")
    return _status_mb("VmRSS")


if __name__ == "__main__":
    arguments = sys.argv[1:]
    if arguments[:1] == ["--memory"]:
        before_mb = _reset_peak_mb()
        _decode(Path(arguments[1]))
        print(_status_mb("VmHWM") - before_mb)
        raise SystemExit
    print(
        json.dumps(
            measure(
                hours=float(arguments[0]) if arguments else 1.0,
                rounds=int(arguments[1]) if len(arguments) > 1 else 5,
            ),
            indent=2,
        )
    )
