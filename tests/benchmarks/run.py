"""Measure everything that has a target, in one run: ``python tests/benchmarks/run.py``.

``--quick`` is a short form of under a minute, to see that it works; ``--page`` measures in full
and rewrites the page of results.
"""

import sys
from pathlib import Path

if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).parents[1]))
    from benchmarks.driver import main

    main(sys.argv[1:])
