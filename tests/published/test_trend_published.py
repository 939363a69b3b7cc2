"""Trend tests against handbook figures and classic repair records; sources beside each check."""

from __future__ import annotations

import numpy as np
import pytest

from rules.screens import laplace, military_handbook

NIST_A = np.array([5, 40, 43, 175, 389, 712, 747, 795, 1299, 1478.0])
M189 = np.array([
    2.6, 16.5, 16.5, 17.0, 21.4, 29.1, 33.3, 56.5, 63.1, 70.6, 73.0, 77.7, 93.9, 95.5, 98.1, 101.1, 132.0, 142.2,
    147.7, 149.0, 167.2, 190.7, 193.0, 198.7, 251.9, 282.5, 286.1,
])  # fmt: skip
HALFBEAK = np.array([
    1382, 2990, 4124, 6827, 7472, 7567, 8845, 9450, 9794, 10848, 11993, 12300, 15413, 16497, 17352, 17632, 18122, 19067,
    19172, 19299, 19360, 19686, 19940, 19944, 20121, 20132, 20431, 20525, 21057, 21061, 21309, 21310, 21378, 21391, 21456,
    21461, 21603, 21658, 21688, 21750, 21815, 21820, 21822, 21888, 21930, 21943, 21946, 22181, 22311, 22634, 22635, 22669,
    22691, 22846, 22947, 23149, 23305, 23491, 23526, 23774, 23791, 23822, 24006, 24286, 25000, 25010, 25048, 25268, 25400,
    25500, 25518.0,
])  # fmt: skip
GRAMPUS = np.array([
    860, 1258, 1317, 1442, 1897, 2011, 2122, 2439, 3203, 3298, 3902, 3910, 4000, 4247, 4411, 4456, 4517, 4899, 4910, 5676,
    5755, 6137, 6221, 6311, 6613, 6975, 7335, 8158, 8498, 8690, 9042, 9330, 9394, 9426, 9872, 10191, 11511, 11575, 12100,
    12126, 12368, 12681, 12795, 13399, 13668, 13780, 13877, 14007, 14028, 14035, 14173, 14173, 14449, 14587, 14610, 15070.0,
])  # fmt: skip


def test_repair_times_of_the_e_handbook():
    """NIST/SEMATECH e-Handbook 8.2.3.4 (values from memory, recomputed): 37.23 on 20 df, upper tail 0.011."""
    found = military_handbook(NIST_A, 1500.0)
    assert found.statistic == pytest.approx(37.2281, abs=5e-5)
    assert found.df == 20
    assert found.p == pytest.approx(2 * 0.010986, abs=5e-6)
    assert laplace(NIST_A, 1500.0).statistic == pytest.approx(-1.32695, abs=5e-6)  # computed
    assert laplace(NIST_A, 1500.0).p == pytest.approx(2 * 0.09226, abs=2e-5)


def test_repairs_of_a_growth_programme():
    """MIL-HDBK-189 (1981) App. C data; 2n / beta = 75.38 on 54 df, upper tail 0.028865 (computed)."""
    found = military_handbook(M189, 300.0)
    assert (found.df, found.statistic) == (54, pytest.approx(75.38328, abs=5e-6))
    assert found.p == pytest.approx(2 * 0.028865, abs=2e-6)


def test_a_worn_engine_shows_a_strong_trend():
    """USS Halfbeak (Ascher & Feingold 1984; Meeker & Escobar 1998): 51 on 140 df from memory; Laplace computed."""
    found = military_handbook(HALFBEAK)
    assert (found.df, found.statistic) == (140, pytest.approx(51.443, abs=5e-4))
    assert laplace(HALFBEAK).statistic == pytest.approx(7.443, abs=5e-4)
    assert laplace(HALFBEAK, 25518.0).statistic == pytest.approx(7.596, abs=5e-4)


def test_a_steady_engine_shows_none():
    """USS Grampus (Meeker & Escobar 1998): 92 on 110 df from memory; ended by time at 16,000 h computed."""
    found = military_handbook(GRAMPUS)
    assert (found.df, found.statistic) == (110, pytest.approx(91.965, abs=5e-4))
    timed = military_handbook(GRAMPUS, 16000.0)
    assert (timed.df, timed.statistic) == (112, pytest.approx(98.6723, abs=5e-5))
    assert laplace(GRAMPUS, 16000.0).statistic == pytest.approx(0.39738, abs=5e-6)
    assert laplace(GRAMPUS).p > 0.2
