"""Laws of series: nothing is lost, and neither order, batching nor the unit of exposure matters."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from rules.merge import before_maturity, clusters_apart, clusters_by_label, on_production, unit_failures
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
    st.booleans(), st.booleans(), st.randoms(), st.floats(0.01, 1000.0),
)  # fmt: skip
def test_events_on_anothers_production_are_all_placed_or_told_of_in_any_order(
    weights, events, per_record, wait, rnd, scale
):
    made = np.arange(len(weights), dtype=np.int64)
    shuffled = list(events)
    rnd.shuffle(shuffled)

    def place(rows, scale=1.0):
        at = np.array([t for t, _ in rows], dtype=np.int64)
        counts = np.array([k for _, k in rows], dtype=np.int64)
        return on_production(
            np.array(weights) * scale, made, at, counts, at, record=np.arange(len(rows)), alive_us=None, per_record=per_record, wait=wait
        )  # fmt: skip

    one, other = place(events), place(shuffled)
    early = sum(k for t, k in events if t < 0)
    late = sum(k for t, k in events if t >= len(weights))
    assert one.steps.events.sum() == sum(k for _, k in events) - early - (late if wait else 0)
    assert one.early == early
    assert (one.waiting, one.forced) == ((late, 0) if wait else (0, late))
    assert one.steps.exposure.sum() + one.steps.open_exposure <= sum(weights) * (1 + 1e-12)
    np.testing.assert_array_equal(one.steps.exposure, other.steps.exposure)
    np.testing.assert_array_equal(one.steps.events, other.steps.events)
    larger = place(events, scale)
    np.testing.assert_allclose(
        larger.steps.exposure, one.steps.exposure * scale, rtol=1e-6, atol=1e-9 * scale
    )
    assert larger.steps.events.tolist() == one.steps.events.tolist()


@given(st.lists(st.sampled_from(["L1", "L2", "L3", ""]), max_size=30))
def test_events_of_one_label_have_one_first_and_unlabelled_ones_stand_alone(labels):
    leader = clusters_by_label(labels).tolist()
    assert leader == [labels.index(v) if v else i for i, v in enumerate(labels)]


@given(st.lists(st.integers(0, 300), max_size=30), st.integers(1, 20), st.floats(0.01, 1000.0))
def test_clusters_by_time_are_what_is_linked_by_short_gaps_and_scale(times, span, scale):
    times = sorted(times)
    leader = clusters_apart(np.array(times, dtype=float), span)
    plain = []
    for i, t in enumerate(times):  # independent: each event asks the one before
        plain.append(plain[-1] if i and t - times[i - 1] < span else i)
    assert leader.tolist() == plain
    # half a unit less, so that rounding after scaling decides nothing
    scaled = clusters_apart(np.array(times, dtype=float) * scale, (span - 0.5) * scale)
    assert scaled.tolist() == plain


@given(st.lists(st.tuples(st.integers(-1, 5), st.booleans(), st.integers(0, 4)), max_size=30))
def test_defects_found_at_several_records_of_a_unit_are_neither_lost_nor_doubled(records):
    unit = np.array([u for u, _, _ in records], dtype=np.int64)
    failing = np.array([f for _, f, _ in records], dtype=bool)
    defects = np.array([float(d) for _, _, d in records])
    keep, fails = first_pass(unit, failing, "any")
    total, found = unit_failures(unit, failing, defects, add=True)
    assert total[keep & fails].sum() == defects[failing].sum()
    assert failing[found[keep & fails]].all()
    assert (unit[found] == unit).all()
    most, _ = unit_failures(unit, failing, defects, add=False)
    assert (most <= total).all()
    assert most[keep & fails].max(initial=0.0) == defects[failing].max(initial=0.0)


@given(
    st.lists(st.tuples(st.integers(0, 3), st.integers(0, 2), st.integers(0, 6)), min_size=1, max_size=40),
    st.booleans(),
)
def test_records_without_exposure_and_events_of_one_moment_are_kept(records, lots):
    records = sorted(records, key=lambda r: r[2])
    weight = np.array([float(q) for q, _, _ in records])
    failures = np.array([k for _, k, _ in records], dtype=np.int64)
    times = np.array([t for _, _, t in records], dtype=np.int64)
    steps = unit_gaps(weight, failures, times, lot=(weight > 1) & lots)
    assert steps.events.sum() == failures.sum()
    assert steps.exposure.sum() + steps.open_exposure == pytest.approx(weight.sum())
    assert (steps.exposure >= 0).all()


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
