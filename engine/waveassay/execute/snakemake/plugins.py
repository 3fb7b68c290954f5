"""What Snakemake is given of ours, and what it needs of the machine."""

import getpass
import os
from pathlib import Path

EXECUTOR, EVENTS = "waveassay-warm", "waveassay-events"


def register_plugins() -> None:
    """Make our executor and our handler of events known to Snakemake in this process."""
    from snakemake_interface_executor_plugins.registry import ExecutorPluginRegistry
    from snakemake_interface_logger_plugins.registry import LoggerPluginRegistry

    from waveassay.execute.snakemake import events, executor

    prefix = "snakemake_{}_plugin_{}"
    ExecutorPluginRegistry().register_plugin(
        prefix.format("executor", EXECUTOR.replace("-", "_")), executor
    )
    LoggerPluginRegistry().register_plugin(
        prefix.format("logger", EVENTS.replace("-", "_")), events
    )


def prepare_for_snakemake(folder: Path | None) -> None:
    """Give Snakemake the cache folder and the user's name that it insists on."""
    if folder is not None:
        os.environ.setdefault("XDG_CACHE_HOME", str(folder / ".snakemake" / "cache"))
    try:
        getpass.getuser()
    except (KeyError, OSError, ImportError):
        os.environ["USER"] = os.environ["LOGNAME"] = f"uid{os.getuid()}"
