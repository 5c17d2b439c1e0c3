"""A small table of measures for two rules."""

import pandas as pd
import pytest

from tests.analysis.synthetic import measures


@pytest.fixture
def draws() -> pd.DataFrame:
    return measures({"least-loaded": 1.0, "one-choice": 4.0})
