"""All screens of a stretch together: their levels on steady data, what they find, and references."""

from __future__ import annotations

from collections import Counter

import numpy as np
import pytest
from scipy import stats

from rules.findings import screen_counts, screen_gaps
from rules.nulls import best_split, dispersion_p, serial_p, split_p, spread_ties, variation_p

DRAWS = 500


def shares(drawn):
    """Share of the draws with each code, and with any."""
    codes = Counter(code for found in drawn for code in {f.code for f in found})
    return {code: many / len(drawn) for code, many in codes.items()}, float(np.mean([bool(f) for f in drawn]))


@pytest.mark.parametrize("n", [12, 30, 60])
@pytest.mark.parametrize("ended_by", ["event", "time"])
def test_steady_gaps_are_warned_of_as_rarely_as_said(n, ended_by):
    rng = np.random.default_rng([n, ended_by == "time"])
    drawn = []
    for _ in range(DRAWS):
        times = np.append(np.sort(rng.random(n)), 1.0)
        gaps = np.diff(times, prepend=0.0)
        drawn.append(screen_gaps(gaps[:-1], gaps[-1], "time") if ended_by == "time" else screen_gaps(gaps))
    each, anything = shares(drawn)
    # 0.01 and four standard errors of 500 draws; five screens of 0.01 together
    assert all(share <= 0.028 for share in each.values()), each
    assert 0.005 < anything <= 0.075


@pytest.mark.parametrize(
    ("mean", "steps"), [(3.0, 12), (1.0, 30), (3.0, 60), (0.2, 100), (0.02, 1500), (8.0, 30)]
)
def test_steady_counts_are_warned_of_as_rarely_as_said(mean, steps):
    """Sparse counts too: their many equal zeros are neither dependence nor scatter."""
    rng = np.random.default_rng(steps)
    size = rng.uniform(0.5, 1.5, steps)
    each, anything = shares([screen_counts(rng.poisson(mean * size), size) for _ in range(DRAWS)])
    assert all(share <= 0.028 for share in each.values()), each
    assert 0.0 < anything <= 0.065


def test_steady_gaps_in_whole_days_are_not_called_uneven():
    rng = np.random.default_rng(9)
    days = [np.diff(np.floor(np.sort(rng.random(40)) * 240.0), prepend=0.0) for _ in range(300)]
    each, _ = shares([screen_gaps(g) for g in days])
    assert all(share <= 0.04 for share in each.values()), each


def test_clusters_of_events_at_one_place_stay_clusters():
    rng = np.random.default_rng(10)
    found = screen_gaps(np.where(np.arange(40) % 4 < 2, 0.0, rng.exponential(50.0, 40)))
    assert {"not-exponential", "over-dispersed"} <= {f.code for f in found}


def test_a_change_inside_is_found_where_it_is_and_both_stretches_are_named():
    rng = np.random.default_rng(4)
    gaps = np.r_[rng.exponential(40.0, 30), rng.exponential(5.0, 30)]
    found = {f.code: f for f in screen_gaps(gaps)}
    assert {"trend", "shift"} <= set(found)
    shift = found["shift"]
    assert abs(shift.at - 29) <= 4
    assert f"the first {shift.at + 1} events" in shift.text
    assert "each look like one level" in shift.text
    assert "Gaps shrank" in found["trend"].text
    assert "Gaps grew" in next(f.text for f in screen_gaps(gaps[::-1]) if f.code == "trend")


def test_a_stretch_with_two_changes_names_only_the_steady_side():
    rng = np.random.default_rng(2)
    gaps = np.r_[rng.exponential(100.0, 30), rng.exponential(2.0, 30), rng.exponential(100.0, 60)]
    text = next(f.text for f in screen_gaps(gaps) if f.code == "shift")
    assert "Only the last" in text or "Only the first" in text


def test_a_change_of_counts_is_found_where_it_is_in_the_steps_given():
    rng = np.random.default_rng(6)
    counts, size = np.r_[rng.poisson(0.6, 25), 0, 0, rng.poisson(5.0, 25)], np.ones(52)
    size[25:27] = 0.0
    found = {f.code: f for f in screen_counts(counts, size)}
    assert {"trend", "shift"} <= set(found)
    assert abs(found["shift"].at - 24) <= 3
    assert "The rate rose" in found["trend"].text
    assert f"the first {counts[: found['shift'].at + 1].sum()} events" in found["shift"].text
    assert all(f.at is None for f in found.values() if f.code != "shift")


def test_a_long_open_gap_is_a_change_only_where_time_ended_the_stretch():
    rng = np.random.default_rng(11)
    gaps = rng.exponential(10.0, 40)
    assert "shift" in {f.code for f in screen_gaps(gaps, 900.0, "time")}
    assert "shift" not in {f.code for f in screen_gaps(gaps, 900.0, "event")}


def test_scattered_counts_are_called_so_and_seldom_a_trend():
    rng = np.random.default_rng(7)
    each, _ = shares([screen_counts(rng.negative_binomial(2.0, 0.25, 40), np.ones(40)) for _ in range(200)])
    assert each["over-dispersed"] > 0.9
    assert each.get("trend", 0.0) <= 0.04
    assert each.get("shift", 0.0) <= 0.04


def test_regular_and_clustered_gaps():
    rng = np.random.default_rng(5)
    even, uneven = screen_gaps(rng.gamma(25.0, 0.04, 40)), screen_gaps(rng.gamma(0.25, 4.0, 40))
    assert "more even" in next(f.text for f in even if f.code == "not-exponential")
    assert "over-dispersed" not in {f.code for f in even}
    assert {"over-dispersed", "not-exponential"} <= {f.code for f in uneven}


def test_the_permutation_chance_of_dependence_is_exact_for_a_few_values():
    """Reference: all orders of seven values, ties among them, one by one."""
    from itertools import permutations

    values = np.array([0.0, 0.0, 0.0, 2.0, 5.0, 5.0, 9.0])
    rank = stats.rankdata(values)
    rank = (rank - rank.mean()) / np.sqrt(((rank - rank.mean()) ** 2).sum())
    every = rank[np.array(list(permutations(range(7))))]
    law = np.abs((every[:, 1:] * every[:, :-1]).sum(axis=1) + 1 / 7)
    r, p = serial_p(values)
    assert r == pytest.approx(float(rank[1:] @ rank[:-1]))
    exact = np.mean(law >= abs(r + 1 / 7) - 1e-9)
    assert abs(p - exact) < 4 * np.sqrt(exact * (1 - exact) / 2000) + 1e-3


@pytest.mark.parametrize(("counts", "size"), [
    ((12, 9, 14, 6, 9, 10), (1, 1, 1, 1, 1, 1)), ((30, 9, 25, 6), (20, 10, 20, 10)),
])  # fmt: skip
def test_dispersion_of_full_counts_is_chi_square(counts, size):
    """Reference: scipy.stats.chisquare."""
    n, e = np.array(counts), np.array(size, dtype=float)
    assert dispersion_p(n, e) == pytest.approx(stats.chisquare(n, e * n.sum() / e.sum()).pvalue)


def test_dispersion_of_sparse_counts_is_the_multinomial_law():
    """Reference: every way to put 6 events into 5 unlike steps (scipy.stats.multinomial)."""
    size = np.array([1.0, 2.0, 1.0, 3.0, 0.5])
    share = size / size.sum()
    ways = np.array([w for w in np.ndindex(7, 7, 7, 7, 7) if sum(w) == 6])
    chance = stats.multinomial(6, share).pmf(ways)
    chi2 = ((ways - 6 * share) ** 2 / (6 * share)).sum(axis=1)
    for counts in ([4, 0, 1, 0, 1], [0, 1, 0, 2, 3], [5, 0, 0, 1, 0]):
        seen = chi2[(ways == counts).all(axis=1)][0]
        exact = chance[chi2 >= seen - 1e-9].sum()
        assert abs(dispersion_p(np.array(counts), size) - exact) < 4 * np.sqrt(exact / 4000) + 5e-4


def test_two_events_on_one_of_many_steps_are_no_scatter():
    """Closed form: 20 events on 2,000 steps share one with probability 0.0908; the chi-square says 0.001."""
    counts = np.zeros(2000, dtype=np.int64)
    counts[:18], counts[18] = 1, 2
    exact = 1.0 - np.prod(1.0 - np.arange(20) / 2000)
    assert dispersion_p(counts, np.ones(2000)) == pytest.approx(exact, abs=0.018)


def test_published_over_dispersion():
    """Gaver & O'Muircheartaigh (1987), pump failures: X² 257.1 on 9 df; von Bortkiewicz (1898): 199.31, p 0.480."""
    pumps = np.array([5, 1, 5, 14, 3, 19, 1, 1, 4, 22])
    hours = np.array([94.3, 15.7, 62.9, 126, 5.24, 31.4, 1.05, 1.05, 2.1, 10.5])
    found = {f.code: f for f in screen_counts(pumps, hours)}
    assert found["over-dispersed"].statistic == pytest.approx(257.1 / 9, abs=0.006)
    corps = np.repeat(np.arange(5), [109, 65, 22, 3, 1])
    assert dispersion_p(corps, np.ones(200)) == pytest.approx(0.48045, abs=0.02)


def test_the_best_split_and_its_chance():
    """Reference: the Poisson likelihood ratio of every split (scipy.stats.poisson), and draws of whole records."""
    rng = np.random.default_rng(13)
    counts, size = rng.poisson(2.0, 20).astype(float), np.ones(20)

    def log_likelihood(n):
        return stats.poisson(n.mean()).logpmf(n).sum()

    ratios = [
        2 * (log_likelihood(counts[:k]) + log_likelihood(counts[k:]) - log_likelihood(counts))
        for k in range(2, 19)
    ]
    k, ratio = best_split(counts, size)
    assert (k, ratio) == (int(np.argmax(ratios)) + 2, pytest.approx(max(ratios)))
    drawn = [best_split(n, size)[1] for n in rng.multinomial(40, np.full(20, 0.05), 2000).astype(float)]
    for high in (4.0, 7.0):
        share = np.mean(np.array(drawn) >= high)
        assert abs(split_p(high, np.full(20, 2.0)) - share) < 4 * np.sqrt(2 * share / 2000)
    assert split_p(3.84, np.full(20, 2.0)) > 0.2  # the chi-square would say 0.05


def test_variation_of_exponential_gaps():
    """Reference: draws with another seed, between the numbers for which the law is kept."""
    drawn = np.random.default_rng(14).exponential(1.0, (4000, 47))
    one = np.quantile(drawn.std(axis=1) / drawn.mean(axis=1), 0.95)
    assert variation_p(float(one), 47) == pytest.approx(0.05, abs=0.02)


def test_spread_ties_leaves_exact_gaps_alone():
    gaps = np.random.default_rng(1).exponential(1.0, 30)
    assert spread_ties(gaps).tolist() == gaps.tolist()
    assert np.sort(spread_ties(np.array([0.0, 0, 0, 0, 5, 5]))).tolist() == pytest.approx(
        [0.3125, 0.9375, 1.5625, 2.1875, 3.75, 6.25]
    )


def test_too_few_say_nothing():
    assert screen_gaps(np.array([1.0, 1.0, 1.0, 90.0])) == ()
    assert screen_gaps(np.zeros(9)) == ()
    assert screen_counts(np.array([0, 0, 0, 40]), np.ones(4)) == ()
    assert screen_counts(np.array([4, 0, 0, 0, 0, 0, 0, 0]), np.ones(8)) == ()
    assert screen_counts(np.array([0, 9, 9, 9, 9, 0]), np.array([1.0, 1.0, 1.0, 1.0, 0.0, 0.0])) == ()


def test_the_same_data_give_the_same_words():
    gaps = np.r_[np.linspace(60, 40, 12), np.linspace(6, 3, 12)]
    first = screen_gaps(gaps)
    assert first == screen_gaps(gaps)
    assert {f.code for f in first} <= {"trend", "shift", "over-dispersed", "not-exponential", "serial"}
