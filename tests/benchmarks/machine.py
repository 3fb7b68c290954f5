"""What kind of machine was measured on: nothing that names it."""

import os
from pathlib import Path

from waveassay.provenance.environment import environment

_SHOWN = ("python", "numpy", "scipy", "pyarrow", "matplotlib", "snakemake")


def machine() -> dict[str, str]:
    """Return what the page says of the machine and of what is installed."""
    known = environment()
    memory_gb = os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") / 1e9
    versions = {**known["lock"], "python": known["python"]["version"]}
    processor, cores = known["machine"]["processor"], known["machine"]["cores_usable"]
    return {
        "processor": f"{processor}, {known['machine']['architecture']}",
        "cores": f"{cores} usable{', of a virtual machine' if _is_virtual() else ''}",
        "memory": f"{memory_gb:.0f} GB",
        "system": f"{known['system']['name']} ({known['system']['distribution']})",
        "versions": ", ".join(f"{name} {versions[name]}" for name in _SHOWN),
    }


def load() -> float:
    """Return how many processes wanted a core, on average over the last minute."""
    return os.getloadavg()[0]


def _is_virtual() -> bool:
    try:
        return " hypervisor" in Path("/proc/cpuinfo").read_text(encoding="utf-8")
    except OSError:
        return False
