"""Snakemake profiles: which cluster to use, and how."""

import contextlib
import io
import re
import shutil
from dataclasses import dataclass
from importlib.metadata import version
from importlib.util import find_spec
from pathlib import Path
from typing import Any

from waveassay.contract.errors import MachineError, UsageError
from waveassay.execute.snakemake.plugins import prepare_for_snakemake, register_plugins

SNAKEFILE = Path(__file__).with_name("Snakefile")
_FILE = re.compile(r"(?:config|profile)(?:\.v(?P<since>\d+)\+)?\.yaml")
_BUILT_IN = ("local", "dryrun", "touch")
_EXTRAS = ("slurm",)  # executors that waveassay offers as an extra
_COMMANDS = {"slurm": ("sbatch", "usually the cluster's login node")}
_JOBS = 100


@dataclass(frozen=True)
class Profile:
    """A checked profile.

    Attributes
    ----------
    file : its YAML.
    jobs : how many jobs may be with the cluster at once; None where jobs run on this machine.
    latency_wait_s : how long a file that another machine wrote may take to be seen.
    status_command : how Slurm is asked about jobs, where the profile says so.
    """

    file: Path
    executor: str
    jobs: int | None
    latency_wait_s: float
    status_command: str | None = None

    @property
    def is_local(self) -> bool:
        """Tell whether jobs run on this machine."""
        return self.executor == "local"


def shipped_profiles() -> Path:
    """Return the folder of the profiles that ship, one folder each."""
    return Path(__file__).with_name("profiles")


def read_profile(argument: Path) -> Profile:
    """Return the profile that an argument names: a folder, or the name of one that ships.

    Raises
    ------
    UsageError
        When there is none, Snakemake does not accept it, or its executor is not installed or
        cannot work on waveassay's store.
    MachineError
        When this is not a machine from which the cluster can be reached.
    """
    file = _find(argument)
    executor = _executor(file)
    known = _parsed(file)
    if known.default_storage_provider:
        raise UsageError(
            f"{file}: default-storage-provider cannot be used: recordings and store are read as "
            "ordinary files. The README says how to work with object storage."
        )
    latency_s = float(known.latency_wait)
    status = getattr(known, "slurm_status_command", None)
    return Profile(
        file,
        executor,
        None if executor == "local" else _count(known.jobs),
        latency_s,
        status if isinstance(status, str) else None,
    )


def _find(argument: Path) -> Path:
    """Return a profile's file."""
    shipped = shipped_profiles()
    names = sorted(path.parent.name for path in shipped.glob("*/config.yaml"))
    for folder in (argument, *([shipped / argument] if str(argument) in names else [])):
        file = _config_file(folder)
        if file is not None:
            return file
    if argument.is_dir():
        raise UsageError(
            f"--cluster {argument}: there is no config.yaml in this folder. Copy "
            f"{shipped / 'slurm'} and edit the copy."
        )
    if argument.exists():
        raise UsageError(f"--cluster {argument}: this is a file; name the folder that holds it.")
    raise UsageError(
        f"--cluster {argument}: there is no such folder. Give a Snakemake profile (a folder with "
        f"config.yaml), or the name of one that ships: {', '.join(names)}."
    )


def _config_file(folder: Path) -> Path | None:
    """Return the file that Snakemake would read: the one for the newest version up to its own."""
    if not folder.is_dir():
        return None
    newest = int(version("snakemake").split(".")[0])
    known = {path: _FILE.fullmatch(path.name) for path in sorted(folder.iterdir())}
    since = {path: int(match["since"] or 0) for path, match in known.items() if match}
    fitting = [path for path in since if since[path] <= newest]
    return max(fitting, key=lambda path: since[path]).absolute() if fitting else None


def _executor(file: Path) -> str:
    import yaml

    try:
        content = yaml.safe_load(file.read_text(encoding="utf-8"))
    except OSError as error:
        raise UsageError(f"{file}: cannot be read: {error.strerror}.") from None
    except (yaml.YAMLError, UnicodeDecodeError) as error:
        raise UsageError(f"{file}: this is not YAML: {error}") from None
    name = content.get("executor") if isinstance(content, dict) else None
    if not isinstance(name, str):
        raise UsageError(f"{file}: it names no executor. Add a line such as: executor: slurm")
    if name in ("dryrun", "touch"):
        raise UsageError(f"{file}: executor {name} computes nothing. Name one that does: slurm")
    package = f"snakemake_executor_plugin_{name.replace('-', '_')}"
    if name not in _BUILT_IN and find_spec(package) is None:
        how = f"waveassay[{name}]" if name in _EXTRAS else package.replace("_", "-")
        raise UsageError(
            f"{file}: executor {name} is not installed. Install it: pip install '{how}'"
        )
    command, where = _COMMANDS.get(name, ("", ""))
    if command and shutil.which(command) is None:
        raise MachineError(
            f"There is no {command} on this machine. Start the run where you would type {command}, "
            f"{where}; or leave --cluster out to run on this machine."
        )
    return name


def _parsed(file: Path) -> Any:
    """Return the options that Snakemake makes of a profile, in Snakemake's own way."""
    told = io.StringIO()
    try:
        with contextlib.redirect_stderr(told), contextlib.redirect_stdout(told):
            prepare_for_snakemake(None)
            register_plugins()  # loads every plugin that is installed, and each may fail
            from snakemake.cli import parse_args
            from snakemake_interface_executor_plugins.registry import ExecutorPluginRegistry

            options = ["--snakefile", str(SNAKEFILE), "--profile", str(file)]
            _, known = parse_args([*options, "--workflow-profile", "none"])
    except (Exception, SystemExit) as error:  # argparse leaves the program
        lines = [line.strip() for line in told.getvalue().splitlines() if line.strip()]
        why = lines[-1] if isinstance(error, SystemExit) and lines else repr(error)
        raise UsageError(f"{file}: Snakemake does not accept it: {why}") from None
    plugin: Any = ExecutorPluginRegistry().get_plugin(known.executor)
    if plugin.common_settings.implies_no_shared_fs:
        raise UsageError(
            f"{file}: executor {known.executor} is for machines that share no disk, but every "
            "node must see the recordings and the store."
        )
    return known


def _count(jobs: object) -> int:
    """Return how many jobs at once; a profile may say nothing, or `unlimited`."""
    return min(jobs, 10_000) if isinstance(jobs, int) else _JOBS
