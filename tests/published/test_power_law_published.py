"""Trend tests and the power law told how a record ended, against handbook figures; sources beside each check."""

from __future__ import annotations

import math

import numpy as np
import pytest

from rules.trend import laplace, lewis_robinson, military_handbook, power_law, reverse_arrangements

NIST_A = np.array([5, 40, 43, 175, 389, 712, 747, 795, 1299, 1478.0])
M189 = np.array([
    2.6, 16.5, 16.5, 17.0, 21.4, 29.1, 33.3, 56.5, 63.1, 70.6, 73.0, 77.7, 93.9, 95.5, 98.1, 101.1, 132.0, 142.2,
    147.7, 149.0, 167.2, 190.7, 193.0, 198.7, 251.9, 282.5, 286.1,
])  # fmt: skip
CR23 = np.array([
    0.2, 4.2, 4.5, 5.0, 5.4, 6.1, 7.9, 14.8, 19.2, 48.6, 85.8, 108.9, 127.2, 129.8, 150.1, 159.7, 227.4, 244.7,
    262.7, 315.3, 329.6, 404.3, 486.2,
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
    """NIST/SEMATECH e-Handbook 8.2.3.4 (memory, recomputed) and the script of 8.4.5.2 (read): betas."""
    test = military_handbook(NIST_A, 1500.0, "time")
    assert (test.statistic, test.df) == (pytest.approx(37.2281, abs=5e-5), 20)
    assert (test.lower, test.upper) == (pytest.approx(0.98901, abs=5e-6), pytest.approx(0.010986, abs=5e-7))
    assert test.p == pytest.approx(2 * test.upper)
    assert laplace(NIST_A, 1500.0, "time").statistic == pytest.approx(-1.32695, abs=5e-6)  # computed
    found = power_law(NIST_A, 1500.0, "time")
    assert found.beta == pytest.approx(0.5372288660, abs=5e-11)
    assert found.corrected == pytest.approx(0.483506, abs=5e-7)


def test_reverse_arrangements_of_the_e_handbook():
    """NIST/SEMATECH e-Handbook 8.2.3.4 (number from memory): 33 of 45; a tie is no reversal."""
    found = reverse_arrangements(np.diff(NIST_A, prepend=0.0))
    assert (found.statistic, found.pairs) == (33, 45)
    assert found.more == pytest.approx(0.036275, abs=5e-7)
    assert found.p == pytest.approx(2 * 0.036275, abs=1e-6)
    one_less = reverse_arrangements(np.array([5, 35, 3, 132, 214, 323, 34, 48, 504, 179.0]))
    assert one_less.statistic == 33
    assert reverse_arrangements(np.array([5, 35, 3, 132, 214, 323, 36, 48, 504, 179.0])).statistic == 34


@pytest.mark.parametrize(("r", "low", "high"), [(4, 0, 6), (12, 20, 46)])
def test_five_percent_numbers_of_reverse_arrangements(r, low, high):
    """NIST/SEMATECH e-Handbook 8.2.3.4 (memory): 5 % points for 4 and 12 gaps; the 1 % ones of 12 are not exact."""
    rng = np.random.default_rng(r)
    drawn = [reverse_arrangements(rng.permutation(r).astype(float)) for _ in range(6000)]
    fewer, more = {f.statistic: f.fewer for f in drawn}, {f.statistic: f.more for f in drawn}
    assert fewer[low] <= 0.05 < fewer[low + 1]
    assert more[high] <= 0.05 < more[high - 1]
    if r == 12:
        assert fewer[16] == pytest.approx(0.01049, abs=5e-6)  # computed; the table prints 16 at 1 %


def test_repairs_of_a_growth_programme():
    """MIL-HDBK-189 (1981) App. C, ended by time at 300 h: 0.7163392624, corrected 0.689808178575 (read)."""
    found = power_law(M189, 300.0, "time")
    assert found.beta == pytest.approx(0.7163392624, abs=5e-11)
    assert found.corrected == pytest.approx(0.689808178575, abs=5e-13)
    assert (found.statistic, found.df) == (pytest.approx(75.38328, abs=5e-6), 54)  # computed


def test_twenty_three_failures():
    """Crow's 23 failures in 500 h (data read, exponents computed)."""
    found = power_law(CR23, 500.0, "time")
    assert found.beta == pytest.approx(0.412738, abs=5e-7)
    assert found.corrected == pytest.approx(0.394793, abs=5e-7)


def test_a_worn_engine_ended_by_its_last_failure():
    """USS Halfbeak (Ascher & Feingold 1984; Meeker & Escobar 1998): 51 on 140 df, 2.76 (memory); z computed."""
    test = military_handbook(HALFBEAK, None, "event")
    assert (test.statistic, test.df) == (pytest.approx(51.443, abs=5e-4), 140)
    assert power_law(HALFBEAK, None, "event").beta == pytest.approx(2.76034, abs=5e-6)
    assert laplace(HALFBEAK, None, "event").statistic == pytest.approx(7.443, abs=5e-4)
    assert laplace(HALFBEAK, 25518.0, "time").statistic == pytest.approx(7.596, abs=5e-4)
    robust = lewis_robinson(HALFBEAK, None, "event")
    assert robust.variation == pytest.approx(1.61496, abs=5e-6)
    assert robust.statistic == pytest.approx(4.6088, abs=5e-5)


def test_a_steady_engine_in_both_truncations():
    """USS Grampus (Meeker & Escobar 1998, ch. 16): 92 on 110 df, 1.22 (memory); to 16,000 h computed."""
    test = military_handbook(GRAMPUS, None, "event")
    assert (test.statistic, test.df) == (pytest.approx(91.965, abs=5e-4), 110)
    assert power_law(GRAMPUS, None, "event").beta == pytest.approx(1.21785, abs=5e-6)
    timed = power_law(GRAMPUS, 16000.0, "time")
    assert (timed.statistic, timed.df) == (pytest.approx(98.6723, abs=5e-5), 112)
    assert timed.beta == pytest.approx(1.13507, abs=5e-6)
    assert laplace(GRAMPUS, 16000.0, "time").statistic == pytest.approx(0.39738, abs=5e-6)


@pytest.mark.parametrize("ended_by", ["time", "event"])
def test_the_corrected_exponent_is_free_of_bias(ended_by):
    """Crow (1974): the mean of the corrected exponent is the true one, in either truncation (8 events, beta 1.5)."""
    rng = np.random.default_rng(12)
    shares = np.sort(rng.random((4000, 8 if ended_by == "time" else 7)), axis=1) ** (1 / 1.5)
    if ended_by == "event":
        shares = np.column_stack([shares, np.ones(4000)])
    found = [power_law(t, 1.0, ended_by) for t in shares]
    mean = np.mean([f.corrected for f in found])
    error = np.std([f.corrected for f in found]) / math.sqrt(4000)
    assert abs(mean - 1.5) < 3.5 * error
    assert np.mean([f.beta for f in found]) > 1.5 + 5 * error


def test_records_too_short_or_ended_before_their_events():
    assert laplace(np.array([4.0]), None, "event").p == 1.0
    assert math.isnan(power_law(np.array([4.0]), None, "event").beta)
    assert math.isnan(power_law(np.array([4.0, 9.0]), None, "event").corrected)
    assert lewis_robinson(np.array([4.0, 8.0, 12.0]), None, "event").p == 1.0
    with pytest.raises(ValueError, match="before its last event"):
        laplace(NIST_A, 1000.0, "time")
    with pytest.raises(ValueError, match="needs its end"):
        laplace(NIST_A, None, "time")
