"""Run lengths of CUSUM schemes against printed figures, each got there in at least two ways."""

from __future__ import annotations

import math

import pytest

from rules.run_length import count_cusum_run_length, cusum_level, gap_cusum_run_length

LN2 = math.log(2.0)

# all from checks of our own (computed: closed form, 40-digit sum, Markov chain, simulation)
GAP_RUNS = [
    # direction, k, h, true mean gap, events to the signal, relative tolerance by the digits printed
    ("worse", 0.5, 0.5, 1.0, 12.0859816013, 1e-11),
    ("worse", 1.0, 0.8, 1.0, 3.42359247403, 1e-11),
    ("worse", 0.7, 2.0, 1.0, 44.3997619098, 1e-11),
    ("worse", 0.7, 4.0, 1.0, 382.311103034, 1e-11),
    ("worse", 0.5, 3.0, 1.0, 7939.53748226, 1e-11),
    ("worse", 0.6, 5.0, 1.0, 14980.8269391, 1e-11),
    ("worse", 0.7, 4.0, 0.5, 18.8720722636, 1e-11),
    ("worse", 0.5, 3.0, 0.5, 52.8333543723, 1e-11),
    ("better", 2.0, 1.5, 1.0, 29.8746074235, 1e-11),
    ("better", 3.0, 2.5, 1.0, 225.418191323, 1e-11),
    ("better", 1.5, 4.0, 1.0, 98.600128794, 1e-11),
    ("better", 2.0, 5.0, 1.0, 551.100458269, 1e-11),
    ("better", 1.3863, 6.0, 1.0, 237.270640946, 1e-11),
    ("better", 1.5, 4.0, 2.0, 8.10392291579, 1e-11),
]


@pytest.mark.parametrize(("direction", "k", "h", "mean", "events", "rel"), GAP_RUNS)
def test_run_length_of_gap_cusums(
    direction: str, k: float, h: float, mean: float, events: float, rel: float
) -> None:
    assert gap_cusum_run_length(k, h, direction, mean_gap=mean) == pytest.approx(events, rel=rel)


# designed for a doubled rate and a doubled gap (computed): h, in control, then after exactly that change
DESIGNS = [
    ("worse", LN2, 2.647514057, 100, 12.526303),
    ("worse", LN2, 3.861924939, 370.4, 18.711228),
    ("worse", LN2, 4.150505618, 500, 20.194517),
    ("worse", LN2, 4.825681045, 1000, 23.674258),
    ("better", 2 * LN2, 4.448673167, 100, 8.096437),
    ("better", 2 * LN2, 6.833098653, 370.4, 11.884247),
    ("better", 2 * LN2, 7.403563226, 500, 12.803244),
    ("better", 2 * LN2, 8.742485536, 1000, 14.969356),
]


@pytest.mark.parametrize(("direction", "k", "h", "steady", "changed"), DESIGNS)
def test_designs_for_a_factor_of_two(
    direction: str, k: float, h: float, steady: float, changed: float
) -> None:
    mean = 0.5 if direction == "worse" else 2.0
    assert gap_cusum_run_length(k, h, direction) == pytest.approx(steady, rel=2e-9)
    assert gap_cusum_run_length(k, h, direction, mean_gap=mean) == pytest.approx(changed, abs=5.1e-7)


def test_longer_steady_runs_cost_delay_by_the_information_per_gap() -> None:
    # Moustakides 1986, Lorden 1971 (computed): rate doubled, 500 to 1000 events costs 3.4797 against
    # ln 2 / I = 3.5887, I = ln 2 + 1/2 − 1 = .193147 a gap
    delays = [gap_cusum_run_length(LN2, h, "worse", mean_gap=0.5) for h in (4.150505618, 4.825681045)]
    assert delays[1] - delays[0] == pytest.approx(3.4797, abs=5.1e-5)
    assert pytest.approx(3.5887, abs=5.1e-5) == LN2 / (LN2 - 0.5)


# one false signal in 500 events, best k (computed): factor, k, h, events after that change
BEST = [
    ("worse", 1.5, 0.8109302, 6.833644506, 40.327099),
    ("worse", 3.0, 0.5493061, 2.333410490, 10.956887),
    ("worse", 5.0, 0.4023595, 1.240368412, 6.620547),
    ("better", 1.5, 1.2163953, 9.497663293, 29.840034),
    ("better", 3.0, 1.6479184, 5.911481258, 5.853194),
    ("better", 5.0, 2.0117974, 4.853332790, 3.071798),
]


@pytest.mark.parametrize(("direction", "factor", "k", "h", "changed"), BEST)
def test_designs_with_the_best_reference_value(
    direction: str, factor: float, k: float, h: float, changed: float
) -> None:
    exact = math.log(factor) / (factor - 1) * (1.0 if direction == "worse" else factor)
    assert k == pytest.approx(exact, abs=5.1e-8)
    mean = 1.0 / factor if direction == "worse" else factor
    # h was found for the exact k; the seven printed places of k would shift the sixth digit
    assert gap_cusum_run_length(exact, h, direction) == pytest.approx(500, rel=2e-8)
    assert gap_cusum_run_length(exact, h, direction, mean_gap=mean) == pytest.approx(changed, abs=6e-7)


def test_head_start_of_half_the_limit() -> None:
    # computed: k = ln 2, h = 4.150505618
    h = 4.150505618
    assert gap_cusum_run_length(LN2, h, "worse", start=h / 2) == pytest.approx(461.353290, abs=5.1e-7)
    found = gap_cusum_run_length(LN2, h, "worse", start=h / 2, mean_gap=0.5)
    assert found == pytest.approx(11.713292, abs=5.1e-7)


@pytest.mark.parametrize(
    ("statistic", "steady", "doubled"), [(2.0, 20.004398, 7.027463), (3.0, 68.636091, 11.820204)]
)
def test_continuous_cusum_is_one_event_more_than_a_gap_cusum(
    statistic: float, steady: float, doubled: float
) -> None:
    # computed: rate doubling, identity 1 + run length (k = ln ρ, h − k), ρ − 1 = 1; simulation agrees
    def events(rate: float) -> float:
        return 1.0 + gap_cusum_run_length(LN2, statistic - LN2, "worse", mean_gap=1.0 / rate)

    assert events(1.0) == pytest.approx(steady, abs=5.1e-7)
    assert events(2.0) == pytest.approx(doubled, abs=5.1e-7)
    assert cusum_level(2.0, statistic) == pytest.approx(steady, rel=1e-3)


# Lorden's bound (computed, closed form): level of the doubling CUSUM at limits 1 to 5, worse side at events
@pytest.mark.parametrize(
    ("limit", "events"), [(1, 11.650), (2, 46.942), (3, 147.810), (4, 427.724), (5, 1194.237)]
)
def test_run_length_at_a_likelihood_limit_is_above_lordens_bound(limit: float, events: float) -> None:
    # in LLR units a gap X adds ln 2 − X, so k = ln 2 and h is the limit itself
    found = gap_cusum_run_length(LN2, limit, "worse")
    assert found == pytest.approx(events, abs=5.1e-4)
    assert found > math.exp(limit)


@pytest.mark.parametrize(
    ("limit", "events"), [(1, 21.229), (2, 76.938), (3, 237.266), (4, 681.980), (5, 1899.734)]
)
def test_run_length_at_a_likelihood_limit_for_a_doubled_gap(limit: float, events: float) -> None:
    # a gap X adds X/2 − ln 2: k = 2 ln 2 and h twice the limit
    assert gap_cusum_run_length(2 * LN2, 2 * limit, "better") == pytest.approx(events, abs=5.1e-4)


# Lucas 1985: k 5, h 10, mean 4 gives 421 (from memory); others computed by a chain
@pytest.mark.parametrize(("mean", "counts"), [(4, 421.65), (5, 29.81), (6, 9.73), (7, 5.59), (8, 3.96)])
def test_count_cusum_of_lucas(mean: float, counts: float) -> None:
    assert count_cusum_run_length(5, 10, mean) == pytest.approx(counts, abs=5.1e-3)


def test_count_cusum_with_a_strict_limit_is_another_chart() -> None:
    # trap 2 (computed): 421.65 where reaching h signals, 655.48 where only passing it does
    assert count_cusum_run_length(5, 10, 4.0, signal=">") == pytest.approx(655.48, abs=5.1e-3)


@pytest.mark.parametrize(("mean", "counts"), [(4, 397.47), (7, 3.35)])
def test_count_cusum_with_a_head_start(mean: float, counts: float) -> None:
    # computed: head start 5
    assert count_cusum_run_length(5, 10, mean, start=5) == pytest.approx(counts, abs=5.1e-3)


LOW_COUNTS = [
    # k, limits, mean, counts (computed by a chain; two of them simulated too)
    (1.0, (2, 3, 4, 5, 6), 0.5, (45.812, 174.246, 632.669, 2249.397, 7933.537)),
    (1.0, (2, 3, 4, 5, 6), 1.5, (3.847, 5.714, 7.668, 9.650, 11.642)),
    (1.5, (3, 4, 5, 6, 7), 1.0, (52.943, 121.952, 273.650, 602.268, 1309.378)),
    (1.5, (3, 4, 5, 6, 7), 2.0, (5.656, 7.506, 9.438, 11.406, 13.388)),
]


@pytest.mark.parametrize(("k", "limits", "mean", "counts"), LOW_COUNTS)
def test_count_cusum_at_low_counts(
    k: float, limits: tuple[float, ...], mean: float, counts: tuple[float, ...]
) -> None:
    found = [count_cusum_run_length(k, h, mean) for h in limits]
    assert found == pytest.approx(counts, abs=5.1e-4)
