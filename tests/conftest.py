"""Settings for every test: hypothesis gives no deadline, since machines are shared.

Where a change is judged (CI is set), it tries the same examples each time, so that a change is not
blamed for what another example would have shown before it.
"""

import os

from hypothesis import settings

judged = bool(os.environ.get("CI"))
settings.register_profile("waveassay", deadline=None, print_blob=True, derandomize=judged)
settings.load_profile("waveassay")
