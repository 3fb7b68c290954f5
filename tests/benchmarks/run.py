"""Measure everything that has a target, in one run: ``python tests/benchmarks/run.py``.

``--quick`` is a short form of two minutes, to see that it works; ``--gate`` is one that fails when
a ratio falls below what is acceptable by more than noise; ``--page`` measures in full and rewrites
the page of results, its figure and the README's table.
"""

import sys
from pathlib import Path

if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).parents[1]))
    from benchmarks.driver import main

    main(sys.argv[1:])
