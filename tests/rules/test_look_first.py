"""Where to look first: exact tails, the adjustment's level, and what must not stand out."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest
from scipy.stats import fisher_exact

from rules.look_first import SHOWN_FROM, look_first


def test_the_exact_chance_against_earlier_events_is_fishers():
    """Reference: scipy.stats.fisher_exact, one-sided."""
    since = {"line": ["A"] * 6 + ["B"] * 2}
    before = {"line": ["A"] * 10 + ["B"] * 20}
    place = next(p for p in look_first(since, before) if p.value == "A")
    assert place.p == pytest.approx(fisher_exact([[6, 2], [10, 20]], alternative="greater").pvalue, rel=1e-10)


def test_the_exact_chance_against_production_by_enumeration():
    """Independent: every outcome of four events over three fixtures with unequal production is listed."""
    share = {"F1": 0.5, "F2": 0.3, "F3": 0.2}
    usual = {"fixture": list(share)}
    since = {"fixture": ["F3", "F3", "F1", "F3"]}
    place = look_first(since, usual, weights=np.array(list(share.values())))[0]
    chance = sum(
        float(np.prod([share[v] for v in outcome]))
        for outcome in product(share, repeat=4)
        if outcome.count("F3") >= 3
    )
    assert (place.value, place.events, place.of) == ("F3", 3, 4)
    assert place.p == pytest.approx(chance, rel=1e-12)


def test_one_attribute_with_two_values_needs_little_adjustment_and_many_attributes_more():
    rng = np.random.default_rng(4)
    since = {"fixture": ["F1"] * 5 + ["F2"]}
    usual = {"fixture": rng.choice(["F1", "F2", "F3", "F4"], 400).tolist()}
    alone = look_first(since, usual, weights=np.ones(400))[0]
    for i in range(12):
        since[f"a{i}"] = rng.choice(list("abcdef"), 6).tolist()
        usual[f"a{i}"] = rng.choice(list("abcdef"), 400).tolist()
    among = next(p for p in look_first(since, usual, weights=np.ones(400)) if p.value == "F1")
    assert alone.p == among.p
    assert alone.p <= alone.p_adjusted < among.p_adjusted


@pytest.mark.parametrize("production", [True, False])
def test_where_nothing_stands_out_something_is_shown_as_rarely_as_said(production):
    rng = np.random.default_rng(11)
    shown = 0
    for trial in range(120):
        usual = {a: rng.choice(list("abcde"), 60).tolist() for a in ("line", "shift", "fixture")}
        since = {a: rng.choice(list("abcde"), 7).tolist() for a in usual}
        found = look_first(since, usual, weights=np.ones(60) if production else None, seed=trial)
        shown += bool(found) and found[0].p_adjusted <= SHOWN_FROM
    # 120 trials at 0.10: mean 12, three standard deviations 10; drawing production anew makes it a little more
    assert shown <= 24


def test_nothing_to_compare_gives_nothing():
    assert look_first({"line": ["A"]}, {"line": ["A", "B"]}) == ()
    assert look_first({"line": ["A", "A"]}, {"line": ["A", "A"]}) == ()
    assert look_first({}, {}) == ()


def test_single_units_are_not_places():
    since = {"serial": [f"S{i}" for i in range(400)]}
    assert look_first(since, {"serial": [f"T{i}" for i in range(10)]}) == ()
