"""Where a chain begins."""

import pytest
from pydantic import ValidationError

from signal_data import spec_of
from spectrum_epochs import Found
from waveassay_stages.load import STAGE, LoadParams


def test_it_names_what_it_needs_and_changes_nothing() -> None:
    params = LoadParams.model_validate_json('{"signals": ["frontal", "artery"]}')
    assert STAGE.needs is not None
    assert STAGE.needs(params) == ("frontal", "artery")
    assert STAGE.kinds_taken(params) == ()
    assert STAGE.run is None
    assert STAGE.spec(params, spec_of(), Found().findings) == spec_of()


@pytest.mark.parametrize("text", ['{"signals": []}', '{"signals": ["a", "a"]}', "{}"])
def test_unsound_parameters(text: str) -> None:
    with pytest.raises(ValidationError):
        LoadParams.model_validate_json(text)
