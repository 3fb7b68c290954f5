"""Run jobs on a cluster, through whatever executor a Snakemake profile names."""

import signal
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path

from waveassay.contract.errors import UsageError
from waveassay.execute.runner import JobEvent
from waveassay.execute.snakemake import slurm
from waveassay.execute.snakemake.process import SnakemakeProcess
from waveassay.execute.snakemake.profile import SNAKEFILE, Profile
from waveassay.execute.snakemake.traces import Traces
from waveassay.execute.work import OUTCOMES

#: Ours whatever a profile says: markers alone tell what is done, and the run has a lock of its own.
_OPTIONS = [
    *("--workflow-profile", "none", "--nocolor", "--nolock", "--keep-going", "--drop-metadata"),
    *("--rerun-triggers", "mtime", "--rerun-incomplete"),
    *("--scheduler", "greedy", "--scheduler-subsample", "1000"),
]
_LOOK_S = 2.0
_FIRST_WORD_S, _LATER_WORDS = 60.0, 5.0
_CANCELLING_S, _CANCELLING_SLURM_S = 60.0, 10.0


@dataclass
class _State:
    """What is known of jobs; ``begun`` counts those whose work has begun on a node."""

    open: set[str] = field(default_factory=set)
    finished: set[str] = field(default_factory=set)
    failed: dict[str, str] = field(default_factory=dict)
    begun: int = 0
    last_sign_s: float = field(default_factory=time.monotonic)
    next_word_s: float = _FIRST_WORD_S

    def note(self, event: JobEvent) -> None:
        if event.what == "started":
            self.open.add(event.job)
        else:
            self.open.discard(event.job)
        if event.what == "finished":
            self.finished.add(event.job)
            self.failed.pop(event.job, None)  # it was tried again
        elif event.what == "failed":
            self.failed[event.job] = event.text
        self._sign()

    def note_begun(self, begun: int) -> None:
        if begun != self.begun:
            self.begun = begun
            self._sign()

    def _sign(self) -> None:
        self.last_sign_s, self.next_word_s = time.monotonic(), _FIRST_WORD_S

    @property
    def silent_s(self) -> float:
        return time.monotonic() - self.last_sign_s


@dataclass
class ClusterRunner:
    """A runner of jobs for `run_recipe`.

    Parameters
    ----------
    profile : the cluster.
    patience_s : how long nothing may happen (no job begins or ends) before the run is stopped.
    say : is told why jobs wait.
    """

    profile: Profile
    patience_s: float
    say: Callable[[str], None]

    def __call__(
        self, folder: Path, workers: int, on_event: Callable[[JobEvent], None]
    ) -> str | None:
        """Run all jobs, ``workers`` at a time; return None, or what went wrong as a whole."""
        state = _State()
        process = SnakemakeProcess(folder, self._options(folder, workers))
        try:
            patient = self._follow(process, state, on_event)
        except BaseException:  # Ctrl-C too: no job may stay behind on the cluster
            self._cancel(process)
            raise
        whole = None
        if not patient:
            whole = (
                f"for {self.patience_s / 3600:g} h no job began or ended on the cluster"
                f"{self._why_waiting(process)}; its jobs were cancelled"
            )
            self._cancel(process)
        else:
            code = process.ended()
            if code and not (state.open or state.finished or state.failed):
                raise UsageError(
                    f"{self.profile.file}: Snakemake could not start: {process.last_words()}"
                )
            if state.open or (code and not state.failed):
                whole = f"Snakemake ended early: {process.last_words()}"
                self._cancel_left(process)
        self._report(folder, state, on_event, whole)
        return whole

    def _follow(
        self, process: SnakemakeProcess, state: _State, on_event: Callable[[JobEvent], None]
    ) -> bool:
        """Pass on what happens until the end; return False when patience ran out before."""
        while True:
            events = process.read(_LOOK_S)
            if events is None:
                return True
            for event in events:
                state.note(event)
                if event.what == "finished":
                    on_event(event)
            if events:
                continue
            state.note_begun(len(list((process.folder / OUTCOMES).glob("*.log"))))
            if state.silent_s > self.patience_s:
                return False
            if state.open and state.silent_s > state.next_word_s:
                self._say_waiting(process, state)

    def _report(
        self,
        folder: Path,
        state: _State,
        on_event: Callable[[JobEvent], None],
        whole: str | None,
    ) -> None:
        traces = Traces(folder, self.profile)
        for job in sorted(state.finished):
            trouble = traces.missing(job)
            if trouble:
                on_event(JobEvent("failed", job, trouble))
        for job, text in sorted(state.failed.items()):
            on_event(JobEvent("failed", job, traces.why(job, text)))
        if whole:
            one_line = " ".join(whole.split())
            for job in sorted(state.open)[:1]:
                on_event(JobEvent("failed", job, f"{whole}\nMachineError: {one_line}"))

    def _options(self, folder: Path, workers: int) -> list[str]:
        count = "--cores" if self.profile.is_local else "--jobs"
        options = ["--snakefile", str(SNAKEFILE), "--directory", str(folder)]
        options += ["--profile", str(self.profile.file), count, str(workers), *_OPTIONS]
        return options + (slurm.options(self.profile) if self._is_slurm else [])

    @property
    def _is_slurm(self) -> bool:
        return self.profile.executor == "slurm"

    def _why_waiting(self, process: SnakemakeProcess) -> str:
        name = slurm.name_of_jobs(process.said()) if self._is_slurm else None
        reason = slurm.why_waiting(name) if name else ""
        return f" (waiting for: {reason})" if reason else ""

    def _say_waiting(self, process: SnakemakeProcess, state: _State) -> None:
        minutes = round(state.silent_s / 60)
        self.say(
            f"{minutes} min without a sign from the cluster, where {len(state.open)} of our jobs "
            f"wait or run{self._why_waiting(process)}. Ctrl-C cancels them."
        )
        state.next_word_s *= _LATER_WORDS

    def _cancel(self, process: SnakemakeProcess) -> None:
        with _ctrl_c_ignored():
            process.interrupt(_CANCELLING_SLURM_S if self._is_slurm else _CANCELLING_S)
            self._cancel_left(process)

    def _cancel_left(self, process: SnakemakeProcess) -> None:
        name = slurm.name_of_jobs(process.said()) if self._is_slurm else None
        if name:
            slurm.cancel(name)


@contextmanager
def _ctrl_c_ignored() -> Iterator[None]:
    """Cancel in peace: an impatient second Ctrl-C would leave jobs with the cluster."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = signal.signal(signal.SIGINT, signal.SIG_IGN)
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, before)
