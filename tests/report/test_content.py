import numpy as np
import pandas as pd
from made_report import made_content

from ramulus.report.content import estimate, numbers


def test_an_absent_table_is_an_empty_one():
    content = made_content(tables={})
    assert len(content.table("orders")) == 0
    assert numbers(content.table("orders"), "order").tolist() == []


def test_undefined_cells_and_words_are_nan():
    table = pd.DataFrame({"order": pd.Series([2, None], dtype="Int64"), "text": ["3", "wide"]})
    np.testing.assert_array_equal(numbers(table, "order"), [2.0, np.nan])
    np.testing.assert_array_equal(numbers(table, "text"), [3.0, np.nan])


def test_an_estimate_without_a_value_is_nan():
    assert np.isnan(estimate({"value": None, "reason": "no flow"})).all()
    assert np.isnan(estimate(None)).all()
    assert estimate({"value": 2.0, "low": None, "high": None})[0] == 2.0
