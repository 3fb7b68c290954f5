"""One run of the command, shared by the checks that go from end to end."""

import pytest

from published_run import PublishedRun, run_published


@pytest.fixture(scope="session")
def published(tmp_path_factory: pytest.TempPathFactory) -> PublishedRun:
    """Return the run over recordings made for the purpose."""
    return run_published(tmp_path_factory.mktemp("published"))
