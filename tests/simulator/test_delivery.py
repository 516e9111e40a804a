"""What a bad link does to samples, and that it never invents, changes or doubles one."""

from collections import Counter
from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from agent.siteplan.load import load_site
from simulator.delivery import SHUFFLE_S, Delivery
from simulator.instrument_faults import LinkState
from simulator.sample import Sample

SITE = Path(__file__).resolve().parents[2] / "simulator" / "sites" / "ostmere.yaml"
TAGS = load_site(SITE).units[0].inputs[:3]
GOOD = LinkState()
LOST = LinkState(lost=True)
KEPT = LinkState(lost=True, buffered=True)


def lot(at: float) -> list[Sample]:
    return [Sample(tag=tag, time=at, value=at + n) for n, tag in enumerate(TAGS)]


def seen(link: Delivery, now: float, state: LinkState = GOOD) -> list[Sample]:
    return list(link.update(now, lot(now), state))


def test_a_good_link_passes_everything_on_at_once() -> None:
    link = Delivery("1")
    for now in range(5):
        assert seen(link, now) == lot(now)
    assert (link.waiting, link.dropped) == (0, 0)


def test_a_late_link_passes_everything_on_in_order_with_its_own_times() -> None:
    link = Delivery("1")
    out = [seen(link, now, LinkState(delay_s=30.0)) for now in range(100)]
    assert all(not o for o in out[:30])
    assert [o == lot(n) for n, o in enumerate(out[30:])] == [True] * 70
    assert link.waiting == 30 * 3


def test_what_is_under_way_still_arrives_when_the_delay_is_over() -> None:
    link = Delivery("1")
    for now in range(10):
        assert seen(link, now, LinkState(delay_s=4.0)) == (lot(now - 4) if now >= 4 else [])
    assert seen(link, 10) == [*lot(6), *lot(10)]


def test_a_shuffled_link_changes_places_within_a_few_seconds_and_by_its_seed() -> None:
    def times(seed: str) -> list[tuple[float, float]]:
        link = Delivery(seed)
        return [(now, s.time) for now in range(200) for s in seen(link, now, LinkState(shuffled=True))]

    found = times("1")
    assert found == times("1")
    assert found != times("2")
    ages = [now - time for now, time in found]
    assert min(ages) >= 0
    assert max(ages) <= SHUFFLE_S
    backwards = sum(b[1] < a[1] for a, b in pairwise(found))
    assert backwards > len(found) / 10
    assert len(found) >= 3 * 197


@pytest.mark.parametrize("skew", [45.0, -45.0])
def test_a_skewed_clock_shifts_the_time_and_nothing_else(skew: float) -> None:
    found = seen(Delivery("1"), 100.0, LinkState(skew_s=skew))
    assert found == [replace(s, time=100.0 + skew) for s in lot(100.0)]


def test_a_lost_link_drops_what_it_does_not_keep() -> None:
    link = Delivery("1")
    assert [seen(link, now, LOST) for now in range(60)] == [[]] * 60
    assert seen(link, 60) == lot(60)
    assert (link.dropped, link.waiting) == (180, 0)


def test_a_lost_link_with_a_memory_sends_the_past_in_order_marked_and_beside_the_present() -> None:
    link = Delivery("1", catch_up=10)
    assert [seen(link, now, KEPT) for now in range(60)] == [[]] * 60
    past: list[Sample] = []
    for now in range(60, 70):
        found = seen(link, now)
        past += found[:-3]
        assert found[-3:] == lot(now)  # the present is not held up
    assert past == [replace(s, historical=True) for now in range(60) for s in lot(now)]
    assert link.dropped == 0


def test_all_at_once_where_the_protocol_can() -> None:
    link = Delivery("1", catch_up=None)
    for now in range(1000):
        seen(link, now, KEPT)
    assert len(seen(link, 1000)) == 1001 * 3


def test_memory_is_bounded_and_the_oldest_gives_way() -> None:
    link = Delivery("1", catch_up=None, kept=30)
    for now in range(100):
        seen(link, now, KEPT)
    assert (link.waiting, link.dropped) == (30, 270)
    assert [s.time for s in seen(link, 100)][:-3] == [float(now) for now in range(90, 100) for _ in TAGS]
    slow = Delivery("1", kept=30)
    for now in range(100):
        seen(slow, now, LinkState(delay_s=1e6))
    assert (slow.waiting, slow.dropped) == (30, 270)


def test_reset_forgets() -> None:
    link = Delivery("1")
    seen(link, 0, KEPT)
    link.reset()
    assert (link.waiting, seen(link, 1)) == (0, lot(1))


def test_a_link_that_keeps_nothing_at_all_is_refused() -> None:
    with pytest.raises(ValueError, match="at least one"):
        Delivery("1", kept=0)


STATES = st.builds(
    LinkState,
    lost=st.booleans(),
    buffered=st.booleans(),
    delay_s=st.sampled_from([0.0, 0.0, 2.5, 7.0]),
    shuffled=st.booleans(),
)


@settings(max_examples=60, deadline=None)
@given(states=st.lists(st.tuples(STATES, st.integers(1, 12)), max_size=8), seed=st.integers(0, 5))
def test_every_sample_arrives_once_or_is_counted_as_dropped(
    states: list[tuple[LinkState, int]], seed: int
) -> None:
    link = Delivery(str(seed))
    sent: list[Sample] = []
    found: list[Sample] = []
    now = 0.0
    for state, seconds in [*states, (GOOD, 40)]:
        for _ in range(seconds):
            sent += lot(now)
            out = link.update(now, lot(now), state)
            assert not (state.lost and out)
            found += out
            now += 1.0
    assert link.waiting == 0
    keys = Counter((s.tag.address, s.time, s.value) for s in found)
    assert set(keys.values()) <= {1}
    assert keys.keys() <= {(s.tag.address, s.time, s.value) for s in sent}
    assert len(found) + link.dropped == len(sent)
