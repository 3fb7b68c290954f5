"""Start Snakemake as a process, hear what happens to jobs, and stop it within a bounded time.

A cluster's run waits on programs that are not ours (the cluster's own commands, which may hang);
a process can always be ended. It also reads a profile in Snakemake's own way, whatever is in it.
"""

import json
import os
import select
import signal
import subprocess
import sys
from collections.abc import Sequence
from pathlib import Path

from waveassay.execute.runner import JobEvent
from waveassay.execute.snakemake.plugins import EVENTS

SAID_FILE, SCREEN_FILE = "snakemake.jsonl", "snakemake.txt"
_ENDING_S = 60.0


class SnakemakeProcess:
    """A running Snakemake. Nothing of what it prints reaches the screen."""

    def __init__(self, folder: Path, options: Sequence[str]) -> None:
        self.folder = folder
        self._buffer = b""
        self._events, events = os.pipe()
        alive, self._alive = os.pipe()
        command = [sys.executable, "-m", "waveassay.execute.snakemake.child", str(folder)]
        command += [str(alive), *options, "--logger", EVENTS]
        command += [f"--logger-{EVENTS}-path", str(folder / SAID_FILE)]
        command += [f"--logger-{EVENTS}-pipe", str(events)]
        try:
            with (folder / SCREEN_FILE).open("ab") as screen:
                self._process = subprocess.Popen(
                    command,
                    cwd=folder,
                    stdin=subprocess.DEVNULL,
                    stdout=screen,
                    stderr=screen,
                    pass_fds=(events, alive),
                    start_new_session=True,  # Ctrl-C reaches it through us alone
                )
        finally:
            os.close(events)
            os.close(alive)

    def read(self, timeout_s: float) -> list[JobEvent] | None:
        """Return the events since the last call, waiting a while for one; None at its end."""
        if not select.select([self._events], [], [], timeout_s)[0]:
            return []
        block = os.read(self._events, 1 << 16)
        if not block:
            return None
        *lines, self._buffer = (self._buffer + block).split(b"\n")
        return [JobEvent(**json.loads(line)) for line in lines]

    def ended(self) -> int:
        """Wait for its end, which the end of its events announces; return its exit code."""
        try:
            self._process.wait(_ENDING_S)
        except subprocess.TimeoutExpired:
            self._process.kill()
        self._close()
        return self._process.wait()

    def interrupt(self, grace_s: float) -> None:
        """Have it cancel the cluster's jobs; end it when it does not do so in time."""
        if self._process.poll() is None:
            self._process.send_signal(signal.SIGINT)
        try:
            self._process.wait(grace_s)
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.wait()
        self._close()

    def _close(self) -> None:
        for descriptor in (self._events, self._alive):
            os.close(descriptor)

    def said(self) -> list[tuple[str, str]]:
        """Return what it has said so far: (level, text)."""
        path = self.folder / SAID_FILE
        if not path.exists():
            return []
        lines = path.read_text(encoding="utf-8", errors="replace").splitlines()
        known = [json.loads(line) for line in lines if line.endswith("}")]
        return [(line["level"], line["text"]) for line in known]

    def last_words(self) -> str:
        """Return its last errors, or failing those the last lines it printed."""
        errors = [text for level, text in self.said() if level in ("ERROR", "CRITICAL")]
        if errors:
            return "\n".join(errors[-3:])
        path = self.folder / SCREEN_FILE
        lines = path.read_text(encoding="utf-8", errors="replace").split("\n")
        return "\n".join([line for line in lines if line.strip()][-5:])
