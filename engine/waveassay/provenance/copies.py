"""Copies of what the store holds, for a run folder."""

from collections.abc import Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass, field
from pathlib import Path
from types import TracebackType

from waveassay.provenance.files import copy_file
from waveassay.provenance.results import Output

_THREADS = 2  # one waits for the disk while one works; more would wait for the same folder
_TOGETHER = 32  # files that a thread is given at once


@dataclass
class Copies:
    """Copies files of results into a run folder, several at a time.

    A run folder's files are copies, never links: who changes one must change no other run.

    Attributes
    ----------
    folder : the run folder.
    digests : relative path -> SHA-256 of each file copied, as it was when the store was read.
    """

    folder: Path
    digests: dict[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self._pool = ThreadPoolExecutor(_THREADS)
        self._running: list[Future[None]] = []
        self._waiting: list[tuple[str, str]] = []
        self._made: set[str] = set()

    def take(self, output: Output, file: str, target: str) -> None:
        """Copy a file of a result, until `done` at the latest.

        Parameters
        ----------
        target : path below the run folder, with forward slashes.
        """
        # As text: paths are put together for every table of thousands of recordings.
        parent = target.rpartition("/")[0]
        if parent not in self._made:
            (self.folder / parent).mkdir(parents=True, exist_ok=True)
            self._made.add(parent)
        self.digests[target] = output.digests[file]
        self._waiting.append((f"{output.folder}/{file}", f"{self.folder}/{target}"))
        if len(self._waiting) == _TOGETHER:
            self._hand_over()

    def done(self) -> None:
        """Wait until all copies are made.

        Raises
        ------
        OSError
            When one could not be made.
        """
        self._hand_over()
        for copied in self._running:
            copied.result()
        self._running.clear()

    def _hand_over(self) -> None:
        self._running.append(self._pool.submit(_copy, tuple(self._waiting)))
        self._waiting.clear()

    def __enter__(self) -> "Copies":
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._pool.shutdown(cancel_futures=True)


def _copy(pairs: Sequence[tuple[str, str]]) -> None:
    for source, target in pairs:
        copy_file(source, target)
