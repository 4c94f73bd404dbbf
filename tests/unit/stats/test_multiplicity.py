from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from statsmodels.stats.multitest import multipletests

from service.stats.multiplicity import holm


@settings(max_examples=20)  # statsmodels takes 60 ms a call
@given(st.lists(st.floats(0, 1), min_size=1, max_size=12))
def test_holm_agrees_with_statsmodels(p_values: list[float]) -> None:
    expected = multipletests(p_values, method="holm")[1]
    np.testing.assert_allclose(holm(np.array(p_values)), expected, rtol=1e-14)
