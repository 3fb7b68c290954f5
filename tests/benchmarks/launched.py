"""Run a command and say what it took: ``python launched.py PIPE COMMAND...``.

A process's most resident memory counts that of the process it was forked from. This one is small,
where the one that measures may not be.
"""

import json
import os
import sys
import time


def main() -> None:
    """Write wall and CPU seconds, the most memory and the exit status to the open file PIPE."""
    pipe, command = int(sys.argv[1]), sys.argv[2:]
    os.set_inheritable(pipe, False)
    start = time.perf_counter()
    process = os.posix_spawnp(command[0], command, os.environ)
    _, status, usage = os.wait4(process, 0)
    said = {
        "wall_s": time.perf_counter() - start,
        "cpu_s": usage.ru_utime + usage.ru_stime,
        "peak": usage.ru_maxrss,
        "code": os.waitstatus_to_exitcode(status),
    }
    os.write(pipe, json.dumps(said).encode())


if __name__ == "__main__":
    main()
