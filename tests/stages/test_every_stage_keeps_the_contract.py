"""Every stage that is installed passes the checks that ship for authors."""

from collections.abc import Callable

import pytest

from waveassay.contract import Stage
from waveassay.contract.checks import CHECKS
from waveassay.recipe.registry import load_registry


@pytest.mark.parametrize("check", CHECKS, ids=lambda check: check.__name__)
@pytest.mark.parametrize("stage", load_registry().stages.values(), ids=lambda stage: stage.name)
def test_stage_keeps_the_contract(stage: Stage, check: Callable[[Stage], None]) -> None:
    check(stage)


def test_every_shipped_stage_is_found() -> None:
    registry = load_registry()
    assert registry.broken == ()
    assert {
        "load",
        "filter.butterworth",
        "filter.notch",
        "resample",
        "exclude.amplitude",
        "exclude.flatline",
        "epoch.consecutive",
    } <= set(registry.stages)
