"""A run folder's files are copies of the store's, with the digests that they had there."""

import hashlib
from pathlib import Path

import pytest

from waveassay.provenance.copies import Copies
from waveassay.provenance.results import Output


def outputs(folder: Path, count: int) -> list[Output]:
    made = []
    for number in range(count):
        own = folder / f"key{number}"
        own.mkdir(parents=True)
        content = f"table {number}".encode()
        (own / "epochs.parquet").write_bytes(content)
        digests = {"epochs.parquet": hashlib.sha256(content).hexdigest()}
        made.append(Output("cortex", own, {}, digests))
    return made


@pytest.mark.parametrize("count", [1, 31, 32, 33, 700])
def test_every_file_is_copied_once_with_its_digest(tmp_path: Path, count: int) -> None:
    run = tmp_path / "run"
    with Copies(run) as copies:
        for number, output in enumerate(outputs(tmp_path / "store", count)):
            copies.take(output, "epochs.parquet", f"epochs/site{number % 3}/{number}")
        copies.done()
    assert len(copies.digests) == count
    for path, sha256 in copies.digests.items():
        assert hashlib.sha256((run / path).read_bytes()).hexdigest() == sha256
        assert (run / path).stat().st_nlink == 1


def test_a_copy_that_cannot_be_made_is_told(tmp_path: Path) -> None:
    made = outputs(tmp_path / "store", 3)
    (made[1].folder / "epochs.parquet").unlink()
    with Copies(tmp_path) as copies, pytest.raises(FileNotFoundError, match="key1"):  # noqa: PT012
        for number, output in enumerate(made):
            copies.take(output, "epochs.parquet", f"epochs/{number}")
        copies.done()
