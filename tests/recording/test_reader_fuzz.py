"""Damaged files: whatever the bytes, the reader refuses in its own words or reads what is there."""

import resource
from collections.abc import Iterator
from fractions import Fraction
from pathlib import Path

import pytest

from edf_mutations import mutated
from waveassay.recording import RecordingError, open_recording

SEEDS = range(600)
# Files are below 4 MB; a field that is believed too soon would ask for far more.
MORE_MEMORY = 256 << 20


@pytest.fixture
def little_memory() -> Iterator[None]:
    """Let the process grow by so much; what asks for more fails with MemoryError."""
    before = resource.getrlimit(resource.RLIMIT_AS)
    pages = int(Path("/proc/self/statm").read_text().split()[0])
    limit = pages * resource.getpagesize() + MORE_MEMORY
    resource.setrlimit(resource.RLIMIT_AS, (limit, before[1]))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_AS, before)


def survive(path: Path, seed: int) -> str:
    """Read all that can be read of one mutation; return the refusal, empty if there was none."""
    path.write_bytes(mutated(seed))
    try:
        with open_recording(path, truncated="read" if seed % 2 else "refuse") as recording:
            facts = recording.facts
            for _ in recording.blocks():
                pass
            indices = [s.index for s in facts.signals]
            for number, piece in enumerate(facts.pieces[:3]):
                recording.read(indices, number, piece.start_s, piece.stop_s)
                recording.read(indices, number, Fraction(1, 3), Fraction(7, 3))
            facts.to_json()
            stops = [piece.stop_s for piece in facts.pieces]
            starts = [piece.start_s for piece in facts.pieces]
            assert all(stop <= start for stop, start in zip(stops, starts[1:], strict=False))
            assert facts.annotations == tuple(sorted(facts.annotations, key=lambda a: a.onset_s))
    except RecordingError as error:
        return str(error)
    return ""


@pytest.mark.usefixtures("little_memory")
def test_mutations(tmp_path: Path) -> None:
    path = tmp_path / "damaged.edf"
    ends = {"refused": 0, "read": 0}
    for seed in SEEDS:
        refusal = survive(path, seed)
        assert not refusal or refusal.startswith(f"{path}: "), f"seed {seed}"
        assert "\n" not in refusal
        ends["refused" if refusal else "read"] += 1
    # Mutations that are all refused, or all read, would show nothing.
    assert min(ends.values()) > len(SEEDS) // 5


@pytest.mark.usefixtures("little_memory")
def test_the_memory_guard_bites() -> None:
    with pytest.raises(MemoryError):
        bytearray(2 * MORE_MEMORY)
