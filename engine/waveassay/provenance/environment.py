"""What the numbers were made with: versions, machine, threads, and every installed package.

No user or host name and no path of the machine is in it, so that a run folder can be shared.
"""

import importlib.metadata
import locale
import os
import platform
import re
import sys
from collections.abc import Iterable, Iterator
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import waveassay
from waveassay.contract.digests import digest, source_digest

# What can change the last bits of a number, or how much of the machine is used.
_NUMERIC_VARIABLES = (
    "BLIS_NUM_THREADS",
    "GOTO_NUM_THREADS",
    "MKL_CBWR",
    "MKL_DEBUG_CPU_TYPE",
    "MKL_DYNAMIC",
    "MKL_ENABLE_INSTRUCTIONS",
    "MKL_NUM_THREADS",
    "MKL_THREADING_LAYER",
    "NPY_DISABLE_CPU_FEATURES",
    "NPY_ENABLE_CPU_FEATURES",
    "NUMEXPR_NUM_THREADS",
    "OMP_DYNAMIC",
    "OMP_NUM_THREADS",
    "OMP_SCHEDULE",
    "OPENBLAS_CORETYPE",
    "OPENBLAS_NUM_THREADS",
    "OPENBLAS_VERBOSE",
    "PYTHONHASHSEED",
    "VECLIB_MAXIMUM_THREADS",
)
# What should not change a number, and is looked at when one did.
_OTHER_VARIABLES = (
    "LANG",
    "LANGUAGE",
    "LC_ALL",
    "LC_CTYPE",
    "LC_NUMERIC",
    "LC_TIME",
    "PYTHONOPTIMIZE",
    "PYTHONUTF8",
    "SOURCE_DATE_EPOCH",
    "TZ",
)
_PATH = re.compile(r"(?:^|[\s:;,='\"])(?:/|~|\\\\|[A-Za-z]:[\\/])")


@dataclass(frozen=True)
class Bundle:
    """A package of stages: its entry point's name, its version, and the folder of its source."""

    name: str
    version: str
    folder: Path


def environment(bundles: Iterable[Bundle] = ()) -> dict[str, Any]:
    """Return all that is known of the environment, ready for JSON, in a fixed order.

    Parameters
    ----------
    bundles : the packages of stages that the run can draw on.
    """
    installed = dict(_installed())
    return {
        "waveassay": {
            "version": _version_of("waveassay", installed),
            "source_sha256": source_digest(Path(waveassay.__file__).parent, "*.py"),
        },
        "bundles": {
            bundle.name: {
                "version": bundle.version,
                "source_sha256": source_digest(bundle.folder),
            }
            for bundle in sorted(bundles, key=lambda b: b.name)
        },
        "python": {
            "version": platform.python_version(),
            "implementation": platform.python_implementation(),
            "compiler": platform.python_compiler(),
            "optimised": sys.flags.optimize,
        },
        "system": {
            "name": platform.system(),
            "release": platform.release(),
            "distribution": _distribution(),
            "c_library": " ".join(platform.libc_ver()).strip(),
        },
        "machine": {
            "architecture": platform.machine(),
            "processor": _processor(),
            "cores": os.cpu_count(),
            "cores_usable": _usable_cores(),
            "byte_order": sys.byteorder,
            "pointer_bits": 64 if sys.maxsize > 2**32 else 32,
        },
        "float": {
            "mantissa_bits": sys.float_info.mant_dig,
            "epsilon": sys.float_info.epsilon,
            "max": sys.float_info.max,
            "min": sys.float_info.min,
            "rounds": sys.float_info.rounds,
        },
        "numerics": _numerics(),
        "variables": _variables(_NUMERIC_VARIABLES),
        "other_variables": _variables(_OTHER_VARIABLES),
        "text": {
            "locale": locale.setlocale(locale.LC_ALL, None),
            "preferred_encoding": locale.getpreferredencoding(False),
            "file_name_encoding": sys.getfilesystemencoding(),
        },
        "lock_digest": digest(installed),
        "lock": installed,
    }


def environment_id(known: dict[str, Any]) -> str:
    """Return 16 hexadecimal digits that differ where a number could.

    They cover code, interpreter, every installed package (a stage may import any of them),
    C library, BLAS, processor and numeric variables; not the number of cores, the kernel, the
    locale or the time zone, which may change no number.
    """
    machine = {k: v for k, v in known["machine"].items() if not k.startswith("cores")}
    numbers = {
        "machine": machine,
        "c_library": known["system"]["c_library"],
        "system": known["system"]["name"],
        **{
            name: known[name]
            for name in (
                "waveassay",
                "bundles",
                "python",
                "float",
                "numerics",
                "variables",
                "lock_digest",
            )
        },
    }
    return digest(numbers)[:16]


def _installed() -> Iterator[tuple[str, str]]:
    """Yield name and version of every distribution, sorted; of two alike the one that imports."""
    found: dict[str, str] = {}
    for distribution in importlib.metadata.distributions():
        name, version = _name_and_version(distribution)
        if name:
            found.setdefault(name, version)
    yield from sorted(found.items())


def _name_and_version(distribution: importlib.metadata.Distribution) -> tuple[str, str]:
    # The whole header would be parsed for each of the two; only its first lines are needed.
    text = distribution.read_text("METADATA") or distribution.read_text("PKG-INFO") or ""
    header: dict[str, str] = {}
    for line in text.splitlines():
        key, colon, value = line.partition(":")
        if not colon or len(header) == 2:
            break
        if key.lower() in ("name", "version"):
            header[key.lower()] = value.strip()
    name = re.sub(r"[-_.]+", "-", header.get("name", "")).lower()
    return name, header.get("version", "")


def _version_of(name: str, installed: dict[str, str]) -> str:
    return installed.get(name, "not installed")


def _variables(names: Iterable[str]) -> dict[str, str]:
    """Return those that are set; a value that is a path of this machine is left out."""
    values = {name: os.environ[name] for name in names if name in os.environ}
    return {
        name: "(a path, left out)" if _PATH.search(value) else value
        for name, value in sorted(values.items())
    }


def _numerics() -> dict[str, Any]:
    """Return how numpy was built and which vector instructions it found here."""
    import numpy as np

    config: dict[str, Any] = np.show_config(mode="dicts")  # type: ignore[assignment]
    libraries = config.get("Build Dependencies", {})
    kept = ("name", "version", "openblas configuration")
    return {
        "numpy": np.__version__,
        **{
            library: {key: libraries.get(library, {}).get(key, "unknown") for key in kept}
            for library in ("blas", "lapack")
        },
        "vector_instructions": {
            key: list(found) for key, found in config.get("SIMD Extensions", {}).items()
        },
    }


def _processor() -> str:
    """Return the processor's model, as the machine calls it."""
    with suppress(OSError):
        for line in Path("/proc/cpuinfo").read_text("utf-8", "replace").splitlines():
            key, _, value = line.partition(":")
            if key.strip() in ("model name", "Model", "cpu model", "Processor"):
                return value.strip()
    if sys.platform == "darwin":
        import subprocess

        with suppress(OSError, subprocess.SubprocessError):
            command = ["/usr/sbin/sysctl", "-n", "machdep.cpu.brand_string"]
            return subprocess.run(
                command, capture_output=True, text=True, check=True, timeout=5
            ).stdout.strip()
    return platform.processor() or platform.machine()


def _usable_cores() -> int | None:
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count()


def _distribution() -> str:
    with suppress(OSError):
        return platform.freedesktop_os_release().get("PRETTY_NAME", "")
    return " ".join(filter(None, (platform.mac_ver()[0], platform.win32_ver()[0])))
