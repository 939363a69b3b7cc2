"""Series against a plain re-statement, and what must be conserved."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from rules.series import calendar_gaps, count_series, first_pass, unit_gaps


def plain_gaps(weights, failures):
    """Independent: the words of the vocabulary, one unit at a time."""
    gaps, running = [], 0.0
    for weight, failed in zip(weights, failures, strict=True):
        running += weight
        for _ in range(failed):
            gaps.append(running)
            running = 0.0
    return gaps, running


@given(
    st.lists(
        st.tuples(st.sampled_from([1.0, 2.5]), st.sampled_from([0, 0, 0, 1, 2])), min_size=1, max_size=80
    )
)
def test_gaps_run_from_just_after_the_last_failing_unit_to_the_next(records):
    weights, failures = (np.array(c) for c in zip(*records, strict=True))
    steps = unit_gaps(
        weights.astype(float),
        failures.astype(np.int64),
        np.arange(len(records)),
        lot=np.zeros(len(records), dtype=bool),
    )
    gaps, left = plain_gaps(weights, failures)
    assert steps.exposure.tolist() == pytest.approx(gaps)
    assert steps.open_exposure == pytest.approx(left)
    assert steps.located


@given(st.lists(st.tuples(st.integers(1, 50), st.integers(0, 3)), min_size=1, max_size=60))
def test_lots_conserve_events_and_exposure(records):
    weights, failures = (np.array(c) for c in zip(*records, strict=True))
    failures = np.minimum(failures, weights)
    steps = unit_gaps(
        weights.astype(float), failures.astype(np.int64), np.arange(len(records)), lot=weights > 1
    )
    assert steps.events.sum() == failures.sum()
    assert steps.exposure.sum() + steps.open_exposure == pytest.approx(weights.sum())
    counted = count_series(weights.astype(float), failures.astype(np.int64), np.arange(len(records)))
    assert counted.events.sum() == failures.sum()


def test_a_lot_whose_last_unit_failed_ends_its_gap():
    args = (np.array([100.0, 40.0]), np.array([0, 1]), np.array([1, 2]))
    assert unit_gaps(*args, lot=np.array([True, True])).located is False
    assert unit_gaps(*args, lot=np.array([True, True]), failing_last=True).exposure.tolist() == [140.0]


def test_in_an_event_only_source_the_first_event_opens_the_first_gap():
    knots = (np.array([0.0, 30.0]), np.array([0, 300]))
    args = (np.array([0.0, 4.0, 4.0, 20.0]), np.array([0, 40, 40, 200]), np.arange(4))
    only = calendar_gaps(*args, knots=knots, origin_is_event=True)
    assert (only.exposure.tolist(), only.open_exposure) == ([4.0, 0.0, 16.0], 10.0)
    assert calendar_gaps(*args, knots=knots, origin_is_event=False).exposure.tolist() == [0.0, 4.0, 0.0, 16.0]


@pytest.mark.parametrize(
    ("mode", "keep", "fails"),
    [
        ("first-pass", [True, True, False, False], [True, False, False, False]),
        ("any", [True, True, False, False], [True, True, False, False]),
        ("every", [True, True, True, True], [True, False, False, True]),
    ],
)
def test_a_unit_tested_again_is_not_a_new_unit(mode, keep, fails):
    # unit 7 fails, then passes; unit 8 passes, then fails
    kept, failing = first_pass(np.array([7, 8, 7, 8]), np.array([True, False, False, True]), mode)
    assert (kept.tolist(), failing.tolist()) == (keep, fails)


def test_records_without_a_unit_are_each_their_own():
    kept, failing = first_pass(np.array([-1, -1]), np.array([True, True]), "first-pass")
    assert kept.all()
    assert failing.all()
