"""What waveassay itself asks of Slurm: is it there, why do jobs wait, cancel what is left."""

import re
import shutil
import subprocess
from collections import Counter
from collections.abc import Sequence
from dataclasses import replace

from waveassay.contract.errors import MachineError, UsageError
from waveassay.execute.snakemake.profile import Profile

_ANSWER_S = 30.0
_OLDEST_S = 240  # Snakemake's plugin looks at jobs at least every 180 s


def checked(profile: Profile) -> Profile:
    """Return the profile with a command set that answers how jobs are.

    Raises
    ------
    MachineError
        When it does not answer.
    UsageError
        When the profile asks with a command that cannot answer.
    """
    answer = _ask("sinfo", "--noheader", "--format=%P")
    if answer is None or not answer.strip():
        raise MachineError(
            f"Slurm does not answer (sinfo failed, or took over {_ANSWER_S:.0f} s). Try sinfo "
            "yourself, and ask whoever runs the cluster."
        )
    # sacct is installed where no accounts are kept, and then tells Snakemake nothing, for ever.
    accounts = shutil.which("sacct") and _ask("sacct", "--noheader", "--allocations") is not None
    if profile.status_command is None:
        return replace(profile, status_command="sacct" if accounts else "squeue")
    if profile.status_command == "sacct" and not accounts:
        raise UsageError(
            f"{profile.file}: slurm-status-command is sacct, but this cluster keeps no accounts: "
            "a run would wait for ever. Write squeue, or leave the line out."
        )
    return profile


def warning(profile: Profile) -> str | None:
    """Return a warning where Slurm forgets jobs before they are looked at."""
    if profile.status_command != "squeue":
        return None
    found = re.search(r"MinJobAge\s*=\s*(\d+)", _ask("scontrol", "show", "config") or "")
    if found is None or int(found[1]) >= _OLDEST_S:
        return None
    return (
        f"This cluster forgets ended jobs after {found[1]} s (MinJobAge) and keeps no accounts: "
        "a job that fails may be waited for in vain. Stop such a run with Ctrl-C and give the same "
        "command again."
    )


def options(profile: Profile) -> list[str]:
    """Return Snakemake's options: commands go as scripts, since `$` may stand in a path."""
    status = profile.status_command or "squeue"
    return ["--slurm-pass-command-as-script", "--slurm-status-command", status]


def why_waiting(name: str) -> str:
    """Return why jobs of a name wait, in Slurm's words; empty when it does not say."""
    answer = _ask("squeue", "--noheader", "--states=PENDING", f"--name={name}", "--format=%r")
    reasons = Counter((answer or "").split("\n"))
    del reasons[""]
    return ", ".join(reason for reason, _ in reasons.most_common(3))


def cancel(name: str) -> None:
    """Cancel all jobs of a name: Snakemake loses sight of some while it submits or looks."""
    _ask("scancel", f"--name={name}")


def name_of_jobs(said: Sequence[tuple[str, str]]) -> str | None:
    """Return the name that Snakemake gave its jobs."""
    for _, text in said:
        found = re.search(r"SLURM run ID: ([\w-]+)", text)
        if found:
            return found[1]
    return None


def _ask(*command: str) -> str | None:
    """Return a command's answer; None when it fails or does not answer in time."""
    try:
        done = subprocess.run(
            command, capture_output=True, text=True, timeout=_ANSWER_S, stdin=subprocess.DEVNULL
        )
    except (OSError, subprocess.TimeoutExpired):
        return None
    return done.stdout if done.returncode == 0 else None
