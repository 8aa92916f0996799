"""Tails of the chi-square and the normal distribution as the engine computes them, against scipy's."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import special, stats

TOLERANCE = 1e-10
SHARES = [*np.logspace(-300, -1, 60), *np.linspace(0.1, 0.999999, 25), 1 - 1e-12]
CHI_SQUARE = """
with {{ spellcurve._tail_steps('statistics', 'chi', 'statistic', 'freedom', 49) }}
select statistic, freedom, {{ spellcurve._tail('chi', 'statistic') }} as tail from chi_halves
"""
NORMAL = """
with {{ spellcurve._tail_steps('squares', 'normal', 'statistic') }}
select statistic, {{ spellcurve._tail('normal', 'statistic') }} as tail from normal_halves
"""


def test_chi_square_tails_from_one_down_to_the_end(each_engine):
    grid = [(float(stats.chi2.isf(share, freedom)), freedom) for freedom in range(1, 50) for share in SHARES]
    rows = [{"statistic": statistic, "freedom": freedom} for statistic, freedom in grid]
    each_engine.load("statistics", {"statistic": "double", "freedom": "bigint"}, rows)
    tails = each_engine.query(each_engine._compile(CHI_SQUARE))
    assert len(tails) == len(rows)
    right = {place: float(stats.chi2.sf(*place)) for place in grid}
    assert min(right.values()) < 1.1e-300
    for row in tails:
        assert row["tail"] == pytest.approx(right[row["statistic"], row["freedom"]], rel=TOLERANCE, abs=0)


def test_two_sided_normal_tails(each_engine):
    deviates = [float(z) for z in [*np.linspace(0, 37, 300), 1e-9, 0.46875 * 2**0.5, 4 * 2**0.5]]
    each_engine.load("squares", {"statistic": "double"}, [{"statistic": z * z} for z in deviates])
    tails = {row["statistic"]: row["tail"] for row in each_engine.query(each_engine._compile(NORMAL))}
    for z in deviates:
        assert tails[z * z] == pytest.approx(float(special.erfc(z / 2**0.5)), rel=TOLERANCE, abs=0)


def test_tails_too_small_for_a_number_are_nought_and_of_nothing_null(each_engine):
    rows = [{"statistic": 1e18}, {"statistic": 2801.0}, {"statistic": 1500.0}, {"statistic": None}]
    each_engine.load("squares", {"statistic": "double"}, rows)
    tails = {row["statistic"]: row["tail"] for row in each_engine.query(each_engine._compile(NORMAL))}
    assert tails == {1e18: 0, 2801.0: 0, 1500.0: 0, None: None}
