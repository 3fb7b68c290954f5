import numpy as np
import pytest

from feature_data import Collected, spectra
from waveassay.contract import ColumnSpec, Features, FeaturesSpec, Kind, SignalSpec, SinkSpec
from waveassay_stages.export.table import STAGE, TableParams, run, spec


@pytest.mark.parametrize("csv", ["auto", "always", "never"])
def test_the_table_asks_for_csv_as_the_recipe_says(csv: str) -> None:
    rows = spectra(np.ones(257)).rows
    table = run(TableParams.model_validate({"csv": csv}), Features("frontal", rows, {}, ("",)))
    assert table.csv == csv


def test_it_takes_features_of_epochs_and_of_averages_and_nothing_flows_on() -> None:
    params = TableParams()
    assert STAGE.kinds_taken(params) == (Kind.FEATURES, Kind.AVERAGE_FEATURES)
    signal = SignalSpec("frontal", "uV")
    given = FeaturesSpec(signal, (ColumnSpec("", "Hz", "spectral edge"),))
    assert spec(params, given, Collected().findings) == SinkSpec(signal)
