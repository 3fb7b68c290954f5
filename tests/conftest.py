"""Settings for every test: hypothesis gives no deadline, since machines are shared."""

from hypothesis import settings

settings.register_profile("waveassay", deadline=None, print_blob=True)
settings.load_profile("waveassay")
