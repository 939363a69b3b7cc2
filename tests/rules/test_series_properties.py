"""Laws of series: nothing is lost, and neither order, batching nor the unit of exposure matters."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from rules.merge import before_maturity, clusters_by_label, on_production
from rules.series import count_series, first_pass, unit_gaps

RECORDS = st.lists(st.tuples(st.integers(1, 40), st.integers(0, 3)), min_size=1, max_size=40)


@given(RECORDS, st.booleans(), st.floats(0.01, 1000.0))
def test_units_and_lots_conserve_events_and_exposure_and_scale(records, located, scale):
    weight = np.array([float(q) for q, _ in records])
    failures = np.array([min(k, q) for q, k in records], dtype=np.int64)
    lot = np.zeros(weight.size, dtype=bool) if located else weight > 1
    times = np.arange(weight.size, dtype=np.int64)
    steps = unit_gaps(weight, failures, times, lot=lot)
    assert steps.exposure.sum() + steps.open_exposure == pytest.approx(weight.sum())
    assert steps.events.sum() == failures.sum()
    scaled = unit_gaps(weight * scale, failures, times, lot=lot)
    np.testing.assert_allclose(scaled.exposure, steps.exposure * scale, rtol=1e-9, atol=1e-9 * scale)
    assert scaled.events.tolist() == steps.events.tolist()


@given(RECORDS)
def test_counts_conserve_events_and_exposure(records):
    weight = np.array([float(q) for q, _ in records])
    counts = np.array([k for _, k in records], dtype=np.int64)
    steps = count_series(weight, counts, np.arange(weight.size))
    assert (steps.exposure.sum(), steps.events.sum()) == (weight.sum(), counts.sum())


@given(
    st.lists(st.floats(0.1, 50.0), min_size=1, max_size=20), st.lists(st.tuples(st.integers(-5, 40), st.integers(1, 2)), max_size=15),
    st.booleans(), st.booleans(), st.randoms(),
)  # fmt: skip
def test_events_on_anothers_production_are_all_placed_or_told_of_in_any_order(
    weights, events, per_record, wait, rnd
):
    made = np.arange(len(weights), dtype=np.int64)
    shuffled = list(events)
    rnd.shuffle(shuffled)

    def place(rows):
        at = np.array([t for t, _ in rows], dtype=np.int64)
        counts = np.array([k for _, k in rows], dtype=np.int64)
        return on_production(
            np.array(weights), made, at, counts, at, record=np.arange(len(rows)), alive_us=None, per_record=per_record, wait=wait
        )  # fmt: skip

    one, other = place(events), place(shuffled)
    early = sum(k for t, k in events if t < 0)
    late = sum(k for t, k in events if t >= len(weights))
    assert one.steps.events.sum() == sum(k for _, k in events) - early - (late if wait else 0)
    assert (one.waiting, one.forced) == ((late, 0) if wait else (0, late))
    assert one.steps.exposure.sum() + one.steps.open_exposure <= sum(weights) * (1 + 1e-12)
    np.testing.assert_array_equal(one.steps.exposure, other.steps.exposure)
    np.testing.assert_array_equal(one.steps.events, other.steps.events)


@given(st.lists(st.sampled_from(["L1", "L2", "L3"]), max_size=30))
def test_one_event_of_each_cluster_is_kept(labels):
    kept = clusters_by_label(np.array(labels, dtype=object))
    assert [v for v, k in zip(labels, kept, strict=True) if k] == list(dict.fromkeys(labels))


@given(st.lists(st.tuples(st.integers(0, 6), st.booleans()), max_size=30))
def test_retests_never_lose_a_failure_when_any_counts(records):
    unit = np.array([u for u, _ in records], dtype=np.int64)
    failing = np.array([f for _, f in records], dtype=bool)
    keep, fails = first_pass(unit, failing, "any")
    assert set(unit[keep & fails].tolist()) == set(unit[failing].tolist())
    assert keep.sum() == len(set(unit.tolist()))


@given(
    st.lists(st.tuples(st.integers(0, 5), st.integers(0, 100), st.booleans()), max_size=30),
    st.integers(1, 60),
)
def test_old_and_young_units_get_the_same_chance_to_fail(records, span):
    records = sorted(records, key=lambda r: r[1])
    unit = np.array([u for u, _, _ in records], dtype=np.int64)
    times = np.array([t for _, t, _ in records], dtype=np.int64)
    failing = np.array([f for _, _, f in records], dtype=bool)
    completed, late, unknown = before_maturity(unit, times, unit, times, failing, span)
    assert unknown == 0
    assert ((times - completed)[failing & ~late] <= span).all()
    assert (completed <= times).all()
