"""Gap and count limits against printed figures and independent computation in extended precision."""

from __future__ import annotations

import math
from collections.abc import Callable
from itertools import pairwise

import mpmath
import pytest
from scipy import integrate

from rules.discrete_limits import count_limits_randomised, unit_gap_limits_randomised
from rules.limits import (
    GapLimits,
    count_limits,
    count_tails,
    gap_limits,
    gap_limits_unbiased,
    gap_tails,
)

HALF = 0.0027 / 2


def digits(places: int) -> float:
    """Half a unit of the last printed place."""
    return 0.5000001 * 10.0**-places


def points_to_signal(limits: GapLimits, rate: float, gaps: int = 1) -> float:
    """Mean number of points until one is outside, the rate being multiplied."""
    return 1.0 / (
        gap_tails(limits.low * rate, gaps=gaps).at_most + gap_tails(limits.high * rate, gaps=gaps).at_least
    )


# Chan, Xie & Goh 2000; Xie, Goh & Ranjan 2002 (computed: gamma quantiles): r, lower, centre, upper
GAMMA_LIMITS = [
    (1, 0.00135091, 0.69314718, 6.60765069),
    (2, 0.05288356, 1.67834699, 8.90020628),
    (3, 0.21168428, 2.67406031, 10.86952473),
    (4, 0.46529621, 3.67206075, 12.68046987),
    # the list prints .79187376; 40 digits of mpmath give .791873786
    (5, 0.79187379, 4.67090888, 14.39239277),
]


@pytest.mark.parametrize(("gaps", "low", "centre", "high"), GAMMA_LIMITS)
def test_probability_limits_for_gaps(gaps: int, low: float, centre: float, high: float) -> None:
    found = gap_limits(HALF, HALF, gaps=gaps)
    assert found.low == pytest.approx(low, abs=digits(8))
    assert found.high == pytest.approx(high, abs=digits(8))
    assert gap_limits(0.5, 0.5, gaps=gaps).low == pytest.approx(centre, abs=digits(8))


# mean time to signal, points × r / rate, at rates .25, .5, 1, 2, 4, 10 (computed)
TIMES = [
    (1, (20.831, 53.451, 370.370, 185.185, 46.390, 7.453)),
    (2, (22.949, 62.513, 740.741, 191.773, 25.700, 2.019)),
    (3, (24.520, 64.742, 1111.111, 162.363, 13.793, 0.845)),
    (4, (26.265, 64.815, 1481.481, 133.118, 8.422, 0.586)),
]


@pytest.mark.parametrize(("gaps", "times"), TIMES)
def test_mean_time_to_signal_of_probability_limits(gaps: int, times: tuple[float, ...]) -> None:
    limits = gap_limits(HALF, HALF, gaps=gaps)
    for rate, time in zip((0.25, 0.5, 1, 2, 4, 10), times, strict=True):
        assert points_to_signal(limits, rate, gaps) * gaps / rate == pytest.approx(time, abs=digits(3))


def test_equal_tails_are_blind_to_a_doubled_rate() -> None:
    # trap 7: the two-sided chart with equal tails has the same run length at rate 1 and rate 2 (law)
    limits = gap_limits(HALF, HALF)
    assert points_to_signal(limits, 2.0) == pytest.approx(points_to_signal(limits, 1.0), rel=1e-12)
    assert points_to_signal(limits, 1.285925) == pytest.approx(515.529, abs=digits(3))  # computed
    # Xie, Goh & Kuralmani 2000; Zhang, Xie & Goh 2006 (formula from memory): place of the maximum
    for alpha, place in ((0.0027, 1.285925), (0.005, 1.299148), (0.01, 1.315473), (0.05, 1.359761)):
        both = gap_limits(alpha / 2, alpha / 2)
        top = points_to_signal(both, place)
        assert top > max(points_to_signal(both, place - 1e-3), points_to_signal(both, place + 1e-3))


# computed from 1 − e^−L + e^−U = α and L e^−L = U e^−U: α, L, U, places of U
UNBIASED = [
    (0.0027, 0.00240738001, 8.12678959674, 11),
    (0.005, 0.00441794345, 7.43233961, 8),
    (0.01, 0.00873456369, 6.64272397, 8),
    (0.002, 0.00179041651, 8.46277449, 8),
]


@pytest.mark.parametrize(("alpha", "low", "high", "places"), UNBIASED)
def test_unbiased_limits_for_one_gap(alpha: float, low: float, high: float, places: int) -> None:
    found = gap_limits_unbiased(alpha)
    assert found.low == pytest.approx(low, abs=digits(11))
    assert found.high == pytest.approx(high, abs=digits(places))


def test_unbiased_limits_signal_sooner_for_any_change() -> None:
    # computed: tails and run lengths at rates .5, .9, 1, 1.1, 2
    found = gap_limits_unbiased(0.0027)
    assert found.tail_low == pytest.approx(0.0024044846, abs=digits(10))
    assert found.tail_high == pytest.approx(0.0002955154, abs=digits(10))
    lengths = [points_to_signal(found, rate) for rate in (0.5, 0.9, 1.0, 1.1, 2.0)]
    assert lengths == pytest.approx([54.367, 353.311, 370.370, 360.266, 208.191], abs=digits(3))


# computed from L^r e^−L = U^r e^−U: r, L, U, lower tail, places of the tail
UNBIASED_GAMMA = [
    (2, 0.06823043, 10.05387601, 0.00222448),
    (3, 0.24776244, 11.85080441, 0.00210747),
    (4, 0.52062856, 13.55999918, 0.00202597),
    (5, 0.86373272, 15.20397772, 0.00196559),
]


@pytest.mark.parametrize(("gaps", "low", "high", "tail"), UNBIASED_GAMMA)
def test_unbiased_limits_for_several_gaps(gaps: int, low: float, high: float, tail: float) -> None:
    found = gap_limits_unbiased(0.0027, gaps=gaps)
    assert found.low == pytest.approx(low, abs=digits(8))
    assert found.high == pytest.approx(high, abs=digits(8))
    assert found.tail_low == pytest.approx(tail, abs=digits(8))


# 0-based counts of good units. p .001: Morais 2017 (published). Others (computed) are printed 1-based.
GEOMETRIC = [
    (0.001, 2, 8122, 0.406312, 0.224264),
    (0.0005, 4, 16249, 0.813599, 0.468725),
    (0.01, 0, 808, 0.240561, 0.010422),
]


@pytest.mark.parametrize(("fraction", "low", "high", "chance_low", "chance_high"), GEOMETRIC)
def test_randomised_limits_for_unit_gaps(
    fraction: float, low: int, high: int, chance_low: float, chance_high: float
) -> None:
    found = unit_gap_limits_randomised(fraction, 0.0027)
    assert (found.low, found.high) == (low, high)
    # one unit of the last place: p .0005 prints .468725 where the equations give .4687244
    assert found.chance_low == pytest.approx(chance_low, abs=1e-6)
    assert found.chance_high == pytest.approx(chance_high, abs=1e-6)


# mean 19.5: Paulino, Morais & Knoth 2016 (published); mean 8: computed
POISSON = [(19.5, 8, 34, 0.246867, 0.230476), (8.0, 1, 18, 0.482414, 0.444451)]


@pytest.mark.parametrize(("mean", "low", "high", "chance_low", "chance_high"), POISSON)
def test_randomised_limits_for_counts(
    mean: float, low: int, high: int, chance_low: float, chance_high: float
) -> None:
    found = count_limits_randomised(mean, 0.0027)
    assert (found.low, found.high) == (low, high)
    assert found.chance_low == pytest.approx(chance_low, abs=digits(6))
    assert found.chance_high == pytest.approx(chance_high, abs=digits(6))


# F(2, 2m) (computed): m, upper limit; lower is about .0013510 for all
PREDICTIVE = [(10, 9.362731), (20, 7.830006), (25, 7.563169), (30, 7.391836), (50, 7.064147), (100, 6.830845)]


@pytest.mark.parametrize(("base", "high"), PREDICTIVE)
def test_predictive_limits_for_the_next_gap(base: int, high: float) -> None:
    found = gap_limits(HALF, HALF, base)
    assert found.high == pytest.approx(high, abs=digits(6))
    assert found.high == pytest.approx(base * (HALF ** (-1 / base) - 1), rel=1e-12)  # the closed form
    assert found.low == pytest.approx(0.0013510, abs=2e-7)


def test_predictive_limits_are_points_of_the_f_distribution() -> None:
    # F tables (from memory 3.49; computed): F .95 and .05 at 2 and 20 degrees of freedom
    found = gap_limits(0.05, 0.05, 10)
    assert found.high == pytest.approx(3.492828, abs=digits(6))
    assert found.low == pytest.approx(0.051425, abs=digits(6))


@pytest.mark.parametrize(
    ("gaps", "base", "low", "high"),
    [(2, 20, 0.05167598, 10.88902696), (3, 30, 0.20563216, 12.61813406)],  # computed: r F(2r, 2m)
)
def test_predictive_limits_for_several_gaps(gaps: int, base: int, low: float, high: float) -> None:
    found = gap_limits(HALF, HALF, base, gaps=gaps)
    assert found.low == pytest.approx(low, abs=digits(8))
    assert found.high == pytest.approx(high, abs=digits(8))


# (1 + U/m)^−m (computed): m, false-alarm share above the upper limit, and in all
PLUG_IN = [
    (5, 0.01483, 0.016179), (10, 0.006265, 0.007615), (20, 0.003315, 0.004665),
    (30, 0.002550, 0.003900), (50, 0.002017, 0.003367), (100, 0.001664, 0.003014),
]  # fmt: skip


@pytest.mark.parametrize(("base", "above", "total"), PLUG_IN)
def test_limits_of_a_known_mean_cheat_with_an_estimated_one(base: int, above: float, total: float) -> None:
    known = gap_limits(HALF, HALF)
    places = 5 if base == 5 else 6
    tail_high = gap_tails(known.high, base).at_least
    assert tail_high == pytest.approx(above, abs=digits(places))
    # printed with the lower tail taken as α/2, which it is to 1e-6
    assert tail_high + gap_tails(known.low, base).at_most == pytest.approx(total, abs=1.1e-6)


# quadrature over the baseline (computed; a simulation of two million draws agrees): m, mean and SD of the ARL
CONDITIONAL = [(5, 273.700, 185.45), (10, 305.697, 170.92), (30, 340.922, 135.17), (100, 359.969, 90.53),
               (1000, 369.250, 32.30)]  # fmt: skip


@pytest.mark.parametrize(("base", "mean", "spread"), CONDITIONAL)
def test_run_length_stays_uncertain_with_an_estimated_mean(base: int, mean: float, spread: float) -> None:
    # trap 9; a baseline whose mean gap came out g times the true one watches as at rate g
    limits = gap_limits(HALF, HALF)

    def moment(power: int) -> float:
        def part(g: float) -> float:
            log_density = base * math.log(base * g) - base * g - math.lgamma(base) - math.log(g)
            return math.exp(log_density) * points_to_signal(limits, g) ** power

        wide = 12 / math.sqrt(base)
        edges = (max(1e-9, 1 - wide), 1 - wide / 4, 1.0, 1 + wide / 4, 1 + wide, 1 + 4 * wide)
        points = sorted({max(1e-9, e) for e in edges})
        return sum(integrate.quad(part, a, b, epsabs=1e-9, epsrel=1e-9)[0] for a, b in pairwise(points))

    first, second = moment(1), moment(2)
    assert first == pytest.approx(mean, abs=digits(3))
    assert math.sqrt(second - first**2) == pytest.approx(spread, abs=digits(2))


# Goh 1987, ln(1−α/2), ln .5 and ln(α/2) over ln(1−p) (computed): p, three limits in units
RARE_FRACTIONS = [
    (0.0005, (2.7011, 1385.95, 13212.00), (4, 2, 2)),
    (0.0001, (13.508, 6931.13, 66073.20), (3, 2, 2)),
    (0.00005, (27.018, 13862.60, 132149.71), (3, 2, 2)),
]


@pytest.mark.parametrize(("fraction", "wanted", "places"), RARE_FRACTIONS)
def test_limits_in_units_for_a_rare_fraction(
    fraction: float, wanted: tuple[float, ...], places: tuple[int, ...]
) -> None:
    both = gap_limits(HALF, HALF)
    found = [x / -math.log1p(-fraction) for x in (both.low, gap_limits(0.5, 0.5).low, both.high)]
    for x, value, place in zip(found, wanted, places, strict=True):
        assert x == pytest.approx(value, abs=digits(place))


# class notebook, c = 4 and three-sigma upper limit 10 (published); others computed: mean, lowest inside, UCL
THREE_SIGMA = [
    (4.0, -1, 10, 352.1417),
    (1.0, -1, 4, 273.2355),
    (2.0, -1, 6, 220.5653),
    (8.0, -1, 16, 268.9603),
]


@pytest.mark.parametrize(("mean", "low", "high", "length"), THREE_SIGMA)
def test_run_length_of_three_sigma_limits_for_counts(mean: float, low: int, high: int, length: float) -> None:
    assert low == -1
    assert 1.0 / count_tails(high + 1, mean).at_least == pytest.approx(length, abs=digits(4))


def test_run_length_of_three_sigma_limits_for_wafers() -> None:
    # mean 16: limits 4 and 28, strictly outside (computed)
    share = count_tails(3, 16.0).at_most + count_tails(29, 16.0).at_least
    assert 1.0 / share == pytest.approx(438.2674, abs=digits(4))


def test_prediction_limits_for_the_next_count() -> None:
    # method Nelson 1982, conditional binomial (computed): 24 in 5, next 1, 95 %: 1 to 10 inside
    found = count_limits(0.025, 0.025, 1.0, 24, 5.0, ended_by="time")
    assert (found.low + 1, found.high - 1) == (1, 10)
    # coverage at a true 4.8 a unit, exact sum over both counts (computed): .97411
    mean, cover = 4.8, 0.0
    for seen in range(90):
        chance = math.exp(seen * math.log(5 * mean) - 5 * mean - math.lgamma(seen + 1))
        limits = count_limits(0.025, 0.025, 1.0, seen, 5.0, ended_by="time") if seen else None
        low, high = (limits.low, limits.high) if limits else (-1, 3)
        inside = (
            1.0 - count_tails(high, mean).at_least - (count_tails(low, mean).at_most if low >= 0 else 0.0)
        )
        cover += chance * inside
    assert cover == pytest.approx(0.97411, abs=digits(5))


@pytest.mark.parametrize(("seen", "high"), [(10, 6), (0, 2)])
def test_prediction_limits_at_three_sigma(seen: int, high: int) -> None:
    # method Nelson 1982 (computed): x in 10, next 1, 99.73 %: [0, 6] after 10, [0, 2] after none
    found = count_limits(HALF, HALF, 1.0, seen, 10.0, ended_by="time")
    assert (found.low + 1, found.high - 1) == (0, high)


def test_one_event_a_year_shows_none_in_37_and_two_or_more_in_26_of_100_years() -> None:
    # common practice, Poisson(1)
    assert round(count_tails(0, 1.0).at_most, 2) == 0.37
    assert round(count_tails(2, 1.0).at_least, 2) == 0.26


TAILS: list[tuple[str, Callable[[], float], Callable[[], mpmath.mpf]]] = [
    ("gap-long", lambda: gap_tails(200.0).at_least, lambda: mpmath.exp(-200)),
    ("gap-short", lambda: gap_tails(1e-9).at_most, lambda: -mpmath.expm1(-mpmath.mpf("1e-9"))),
    ("gaps-long", lambda: gap_tails(90.0, gaps=5).at_least, lambda: mpmath.gammainc(5, 90, regularized=True)),
    ("gaps-short", lambda: gap_tails(0.01, gaps=5).at_most,
     lambda: mpmath.gammainc(5, 0, mpmath.mpf("0.01"), regularized=True)),
    ("next-gap-long", lambda: gap_tails(80.0, 12).at_least, lambda: (1 + mpmath.mpf(80) / 12) ** -12),
    ("next-gaps-long", lambda: gap_tails(80.0, 12, gaps=3).at_least,
     lambda: mpmath.betainc(12, 3, 0, mpmath.mpf(12) / 92, regularized=True)),
    ("next-gaps-short", lambda: gap_tails(0.001, 12, gaps=3).at_most,
     lambda: mpmath.betainc(3, 12, 0, mpmath.mpf("0.001") / mpmath.mpf("12.001"), regularized=True)),
    ("count-many", lambda: count_tails(40, 4.0).at_least, lambda: mpmath.gammainc(40, 0, 4, regularized=True)),
    ("count-few", lambda: count_tails(2, 60.0).at_most, lambda: mpmath.gammainc(3, 60, regularized=True)),
    ("next-count-many", lambda: count_tails(40, 3.0, 12, 12.0).at_least,
     lambda: 1 - mpmath.nsum(lambda n: mpmath.binomial(n + 11, 11) * mpmath.mpf("0.2") ** n
                             * mpmath.mpf("0.8") ** 12, [0, 39])),
    ("next-count-few", lambda: count_tails(1, 90.0, 12, 12.0).at_most,
     lambda: (mpmath.mpf(12) / 102) ** 12 * (1 + 12 * mpmath.mpf(90) / 102)),
]  # fmt: skip


@pytest.mark.parametrize(("product", "exact"), [t[1:] for t in TAILS], ids=[t[0] for t in TAILS])
def test_far_tails_keep_twelve_digits(product: Callable[[], float], exact: Callable[[], mpmath.mpf]) -> None:
    # independent: mpmath at 60 digits
    with mpmath.workdps(60):
        wanted = exact()
        assert abs(product() / wanted - 1) < 1e-12
