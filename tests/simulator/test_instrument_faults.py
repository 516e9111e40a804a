"""Instruments that lie: each fault does what it says and nothing else, and one by one equals in a row."""

import math
from collections.abc import Sequence

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from simulator.instrument_faults import FaultTrack, InstrumentFault, InstrumentFaultKind, SampleQuality
from simulator.instruments import BUDGETS, QUALITY_CODES, SPIKE_EVERY, Instrument

Kind = InstrumentFaultKind
LOW = 1.01e5  # low end of a gauge span, absolute
COUNT = 600


def truth(count: int = COUNT) -> NDArray[np.float64]:
    return 30e5 + 1e5 * np.sin(np.arange(count) / 40)


def run(
    faults: Sequence[FaultTrack] = (), *, count: int = COUNT, holds_last: bool = False, seed: str = "3/PT"
) -> tuple[NDArray[np.float64], NDArray[np.uint8]]:
    instrument = Instrument("suction_pressure", seed, span_low=LOW, holds_last=holds_last)
    return instrument.readings(truth(count), 1.0, faults)


def track(kind: Kind, size: float, first: int, end: int, *, absent: float = 0.0) -> FaultTrack:
    sizes = np.full(COUNT, absent)
    sizes[first:end] = size
    return FaultTrack(kind=kind, sizes=sizes)


CLEAN, GOOD = run()


def test_bias_adds_its_size_and_a_ramp_is_a_drift() -> None:
    sizes = np.linspace(0.0, 2e5, COUNT)
    found, quality = run([FaultTrack(kind=Kind.BIAS, sizes=sizes)])
    np.testing.assert_allclose(found - CLEAN, sizes, atol=1e-6)
    assert (quality == 0).all()


def test_stuck_repeats_its_last_reading_exactly_and_comes_back_to_the_same_noise() -> None:
    found, quality = run([track(Kind.STUCK, 1.0, 100, 300)])
    assert (found[100:300] == CLEAN[99]).all()
    assert (found[:100] == CLEAN[:100]).all()
    assert (found[300:] == CLEAN[300:]).all()
    assert (quality == 0).all()


def test_stuck_from_the_start_repeats_its_first_reading() -> None:
    found, _ = run([track(Kind.STUCK, 1.0, 0, COUNT)])
    assert (found == CLEAN[0]).all()


def test_spikes_are_of_the_given_size_sparse_and_one_or_two_samples_long() -> None:
    count = 60 * SPIKE_EVERY
    clean, _ = run(count=count)
    found, _ = run([FaultTrack(kind=Kind.SPIKES, sizes=np.full(count, 5e5))], count=count)
    leap = found - clean
    high = leap > 1.0
    np.testing.assert_allclose(leap[high], 5e5, atol=1e-6)
    assert (leap[~high] == 0).all()
    starts = np.flatnonzero(np.diff(high.astype(int), prepend=0) == 1)
    ends = np.flatnonzero(np.diff(high.astype(int), append=0) == -1)
    assert len(starts) == 60  # one in each stretch
    assert set((ends - starts + 1).tolist()) == {1, 2}
    assert np.diff(starts).min() > 2
    assert len(set((starts % SPIKE_EVERY).tolist())) > 20  # not at one place
    other, _ = run([FaultTrack(kind=Kind.SPIKES, sizes=np.full(count, 5e5))], count=count, seed="4/PT")
    assert ((other - run(count=count, seed="4/PT")[0] > 1.0) != high).any()


def test_wrong_span_stretches_from_the_low_end_of_the_span() -> None:
    found, _ = run([track(Kind.WRONG_SPAN, 1.25, 200, COUNT, absent=1.0)])
    np.testing.assert_allclose(found[200:] - LOW, 1.25 * (CLEAN[200:] - LOW), rtol=1e-12)
    assert (found[:200] == CLEAN[:200]).all()


def test_without_a_span_a_wrong_one_is_a_factor_of_the_whole() -> None:
    clean = Instrument("flow", "1/FT", span_low=-math.inf).update(100.0, 1.0)[0]
    wrong = Instrument("flow", "1/FT", span_low=-math.inf).update(
        100.0, 1.0, [InstrumentFault(kind=Kind.WRONG_SPAN, size=0.5)]
    )[0]
    assert clean is not None
    assert wrong == pytest.approx(0.5 * clean)


def test_bad_quality_gives_no_value_or_the_last_one_by_the_senders_habit() -> None:
    bad = track(Kind.BAD_QUALITY, 1.0, 50, 60)
    none, quality = run([bad])
    last, held_quality = run([bad], holds_last=True)
    assert np.isnan(none[50:60]).all()
    assert not np.isnan(np.delete(none, np.s_[50:60])).any()
    assert (last[50:60] == CLEAN[49]).all()
    assert (quality == held_quality).all()
    assert set(quality[50:60].tolist()) == {QUALITY_CODES[SampleQuality.BAD]}
    assert (np.delete(quality, np.s_[50:60]) == 0).all()


def test_a_sender_that_holds_the_last_value_has_none_before_the_first() -> None:
    instrument = Instrument("suction_pressure", "1/PT", holds_last=True)
    fault = [InstrumentFault(kind=Kind.BAD_QUALITY, size=1.0)]
    assert instrument.update(30e5, 1.0, fault) == (None, SampleQuality.BAD)
    value, quality = instrument.update(30e5, 1.0)
    assert quality is SampleQuality.GOOD
    assert instrument.update(40e5, 1.0, fault) == (value, SampleQuality.BAD)


def test_uncertain_quality_leaves_the_value_and_bad_outranks_it() -> None:
    found, quality = run([track(Kind.UNCERTAIN_QUALITY, 1.0, 10, 30), track(Kind.BAD_QUALITY, 1.0, 20, 30)])
    assert (found[:20] == CLEAN[:20]).all()
    assert quality[10:20].tolist() == [1] * 10
    assert quality[20:30].tolist() == [2] * 10


def test_a_fault_of_no_size_is_absent() -> None:
    for kind in Kind:
        none = 1.0 if kind is Kind.WRONG_SPAN else 0.0
        assert not InstrumentFault(kind=kind, size=none).present
        assert InstrumentFault(kind=kind, size=0.5).present
        found, quality = run([FaultTrack(kind=kind, sizes=np.full(COUNT, none))])
        assert (found == CLEAN).all()
        assert (quality == GOOD).all()


def test_a_clean_and_a_faulty_run_share_their_noise() -> None:
    """After every fault has come and gone the readings are the clean ones again, to the last bit."""
    tracks = [track(kind, 0.7, 20, 400, absent=1.0 if kind is Kind.WRONG_SPAN else 0.0) for kind in Kind]
    found, quality = run(tracks)
    assert (found[400:] == CLEAN[400:]).all()
    assert (found[:20] == CLEAN[:20]).all()
    assert (quality[400:] == 0).all()


SIZES = {
    Kind.BIAS: st.sampled_from([0.0, 2e4]), Kind.SPIKES: st.sampled_from([0.0, 3e5]),
    Kind.WRONG_SPAN: st.sampled_from([1.0, 1.1]), Kind.STUCK: st.sampled_from([0.0, 1.0]),
    Kind.BAD_QUALITY: st.sampled_from([0.0, 1.0]), Kind.UNCERTAIN_QUALITY: st.sampled_from([0.0, 1.0]),
}  # fmt: skip


@settings(max_examples=40, deadline=None)
@given(data=st.data())
def test_one_by_one_equals_in_a_row_in_any_pieces(data: st.DataObject) -> None:
    """Any faults, any steps, cut into any pieces, told one by one or in a row: the same to the last bit."""
    quantity = data.draw(st.sampled_from(sorted(BUDGETS)))
    holds_last = data.draw(st.booleans())
    count = 130
    cuts = sorted(data.draw(st.sets(st.integers(1, count - 1), max_size=4)))
    steps = np.array([data.draw(st.sampled_from([0.0, 1.0, 60.0]))] * 65 + [1.0] * 65)
    tracks = []
    for kind in data.draw(st.lists(st.sampled_from(list(Kind)), max_size=5)):
        pattern = data.draw(st.lists(SIZES[kind], min_size=5, max_size=5))
        tracks.append(FaultTrack(kind=kind, sizes=np.repeat(pattern, count // 5).astype(float)))
    true = np.where(np.arange(count) < 20, 0.0, truth(count)) if quantity == "speed" else truth(count)

    def made() -> Instrument:
        return Instrument(quantity, "5/X", span_low=LOW, holds_last=holds_last)

    single = made()
    values, words = [], []
    for n in range(count):
        faults = [InstrumentFault(kind=t.kind, size=float(t.sizes[n])) for t in tracks]
        value, quality = single.update(float(true[n]), float(steps[n]), faults)
        values.append(math.nan if value is None else value)
        words.append(QUALITY_CODES[quality])
    rows = made()
    for first, end in zip([0, *cuts], [*cuts, count], strict=True):
        part = [FaultTrack(kind=t.kind, sizes=t.sizes[first:end]) for t in tracks]
        if data.draw(st.booleans()) and end - first < 40:
            for n in range(first, end):
                faults = [InstrumentFault(kind=t.kind, size=float(t.sizes[n])) for t in tracks]
                value, quality = rows.update(float(true[n]), float(steps[n]), faults)
                np.testing.assert_array_equal(math.nan if value is None else value, values[n])
                assert QUALITY_CODES[quality] == words[n]
            continue
        found, codes = rows.readings(true[first:end], steps[first:end], part)
        np.testing.assert_array_equal(found, values[first:end])
        np.testing.assert_array_equal(codes, words[first:end])
