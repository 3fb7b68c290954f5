"""What a worker frees stays with it until it is given back, where the C library listens."""

import platform
import subprocess
import sys
from pathlib import Path

import pytest

# In a process of its own: what is told to the C library holds for good.
SCRIPT = """
import os
from pathlib import Path
from waveassay.execute.memory import give_back_freed_memory, keep_freed_memory
import numpy as np

def held_mb():
    return int(Path("/proc/self/statm").read_text().split()[1]) * os.sysconf("SC_PAGE_SIZE") >> 20

keep_freed_memory()
arrays = [np.ones(1 << 20) for _ in range(10)]
del arrays
kept = held_mb()
print(kept, give_back_freed_memory(), held_mb())
"""


@pytest.mark.skipif(
    platform.libc_ver()[0] != "glibc" or not Path("/proc/self/statm").exists(),
    reason="the C library here is not glibc, or the system does not say what a process holds",
)
def test_freed_memory_is_kept_until_it_is_given_back() -> None:
    done = subprocess.run(
        [sys.executable, "-c", SCRIPT], capture_output=True, text=True, check=True, timeout=60
    )
    kept, given_back, left = done.stdout.split()
    assert given_back == "True"
    assert int(kept) - int(left) > 70  # of 80 MB
