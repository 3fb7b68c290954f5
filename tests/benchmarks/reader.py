"""Decoding every signal of a long recording, against a plain read of the same file.

Ratios are of times measured in turn, each within one round; memory is the growth of a fresh
process's peak while it decodes.
"""

import json
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

from benchmarks.measured import Spread, child, own_peak_mb, ratios
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


def _compare(path: Path, rounds: int) -> dict[str, Any]:
    ways: dict[str, Callable[[Path], None]] = {"plain": _plain, "decode": _decode, "two": _two}
    times: dict[str, list[float]] = {name: [] for name in ways}
    _plain(path)  # into the system's cache
    for _ in range(rounds):
        for name, way in ways.items():
            start = time.perf_counter()
            way(path)
            times[name].append(time.perf_counter() - start)
    return {
        "size_mb": path.stat().st_size / _MB,
        "plain_s": Spread.of(times["plain"]),
        "decode_all_ratio": ratios(times["decode"], times["plain"]),
        "decode_two_ratio": ratios(times["two"], times["plain"]),
        "memory_growth_mb": Spread.of(child("reader", path).json for _ in range(min(rounds, 3))),
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


def memory_growth_mb(path: Path) -> float:
    """Return how far decoding raises the peak of this process, which has decoded nothing before."""
    try:
        # Sets the peak back to what is resident now; elsewhere importing may hide some of it.
        Path("/proc/self/clear_refs").write_text("5")
        before_mb = _status_mb("VmRSS")
    except OSError:
        before_mb = own_peak_mb()
        _decode(path)
        return own_peak_mb() - before_mb
    _decode(path)
    return _status_mb("VmHWM") - before_mb


def _status_mb(key: str) -> float:
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith(key + ":"):
            return int(line.split()[1]) * 1024 / _MB
    raise OSError(f"the kernel does not tell {key}")


if __name__ == "__main__":
    print(json.dumps(memory_growth_mb(Path(sys.argv[1]))))
