"""What holds for everything registered: tuner, detectors, meters, rules, and the chain as a whole.

Any split of the source stream is the whole; a gap too. One channel is the same channel among many. Reset is new.
The input is left as it was (all arrays here are read-only).
"""

from dataclasses import fields, replace

import numpy as np
import pytest

from monitord.blocks import Detected
from monitord.chain import Chain
from monitord.condition.tuner import Tuner
from monitord.detect import DETECTORS
from monitord.measure import METERS
from monitord.notice import RULES
from monitord.stream import Stream
from tests.contracts.streams import CHANNELS, RATE_HZ, bank, blocks, hops, stream
from tests.runs import Kept

SIZES = (1, 63, 64, 65, 8193)
GAPS = (None, (5_000, 5_001), (4_999, 9_111))
PLAIN = ("rate_hz", "span", "second", "noise_gain", "delay_s")
ARRAYS = [field.name for field in fields(Detected) if field.name not in PLAIN]


def through(size: int, gap: tuple[int, int] | None, samples: np.ndarray) -> Kept:
    outlet = Kept()
    rules = [make() for make in RULES]
    chain = Chain(CHANNELS, Stream(RATE_HZ, 0.0, False, True), rules, [outlet], outlet.tally, 0.5)
    for block in blocks(samples, size, gap):
        chain.process(block)
    chain.finish()
    return outlet


def detected_by(name: str, rows: slice = slice(None)) -> list[Detected]:
    detector = DETECTORS[name]()
    detector.prepare(bank(CHANNELS[rows]))
    return [kept(detector.process(hop)) for hop in hops(stream(), CHANNELS[rows])]


def kept(detected: Detected) -> Detected:
    """The hop for good: the arrays of a second are good until the next hop only."""
    second = detected.second
    if second is None:
        return detected
    in_phase, coherent = second.in_phase.copy(), second.coherent.copy()
    in_phase.flags.writeable = coherent.flags.writeable = False
    return replace(detected, second=replace(second, in_phase=in_phase, coherent=coherent))


def same(one: object, other: object, **tolerance: float) -> None:
    np.testing.assert_allclose(np.asarray(one), np.asarray(other), **tolerance)


@pytest.mark.parametrize("gap", GAPS, ids=["whole", "one lost", "many lost"])
def test_any_split_of_the_stream_gives_identical_hops(gap: tuple[int, int] | None) -> None:
    samples = stream()
    banks = [list(CHANNELS)]
    whole = Tuner(RATE_HZ, 0.0, False, banks)
    expected = [hop[0] for block in blocks(samples, len(samples), gap) for hop in whole.process(block)]
    assert len(expected) > 10
    for size in SIZES:
        tuner = Tuner(RATE_HZ, 0.0, False, banks)
        found = [hop[0] for block in blocks(samples, size, gap) for hop in tuner.process(block)]
        assert [hop.span.index for hop in found] == [hop.span.index for hop in expected]
        assert [hop.span.fresh for hop in found] == [hop.span.fresh for hop in expected]
        same([hop.span.utc for hop in found], [hop.span.utc for hop in expected], atol=1e-6)
        for one, other in zip(found, expected, strict=True):
            np.testing.assert_array_equal(one.samples, other.samples)


@pytest.mark.parametrize("gap", GAPS, ids=["whole", "one lost", "many lost"])
def test_any_split_of_the_stream_gives_the_same_readings_and_events(gap: tuple[int, int] | None) -> None:
    samples = stream()
    expected = through(len(samples), gap, samples)
    assert expected.events
    for size in (63, 64, 65, 8193):
        found = through(size, gap, samples)
        assert [(e.kind, e.channel, e.started_s, e.ended_s) for e in found.events] == [
            (e.kind, e.channel, e.started_s, e.ended_s) for e in expected.events
        ]
        for one, other in zip(found.readings, expected.readings, strict=True):
            assert one.span.index == other.span.index
            np.testing.assert_array_equal(one.faults, other.faults)
            for name in other.values:
                same(one.values[name], other.values[name], rtol=1e-9)


@pytest.mark.parametrize("name", DETECTORS)
def test_a_detector_treats_one_channel_as_it_does_among_many(name: str) -> None:
    together = detected_by(name)
    for row in range(len(CHANNELS)):
        for alone, among in zip(detected_by(name, slice(row, row + 1)), together, strict=True):
            for field in ARRAYS:
                same(getattr(alone, field)[0], getattr(among, field)[row], rtol=2e-3, atol=2e-5)


@pytest.mark.parametrize("name", DETECTORS)
def test_a_detector_that_was_reset_is_as_new(name: str) -> None:
    detector = DETECTORS[name]()
    detector.prepare(bank())
    wave = hops(stream())
    first = [detector.process(hop) for hop in wave]
    detector.reset()
    for again, before in zip([detector.process(hop) for hop in wave], first, strict=True):
        for field in ARRAYS:
            np.testing.assert_array_equal(getattr(again, field), getattr(before, field))


@pytest.mark.parametrize("make", METERS)
def test_a_meter_treats_one_channel_as_it_does_among_many(make: type) -> None:
    together = detected_by("synchronous")
    many = make()
    many.prepare(bank())
    moments = [many.process(hop) for hop in together]
    reading = many.reading()
    assert set(reading) == {quantity.name for quantity in many.quantities}
    for row in range(len(CHANNELS)):
        one = make()
        one.prepare(bank(CHANNELS[row : row + 1]))
        for hop, among in zip(detected_by("synchronous", slice(row, row + 1)), moments, strict=True):
            alone = one.process(hop)
            assert alone.keys() == among.keys()
            for field in alone:
                same(alone[field][0], among[field][row], rtol=2e-3, atol=2e-5)
        for name, value in one.reading().items():
            same(value[0], reading[name][row], rtol=2e-3, atol=2e-5)


@pytest.mark.parametrize("make", METERS)
def test_a_meter_that_was_reset_is_as_new(make: type) -> None:
    wave = detected_by("synchronous")
    for hop in wave:
        for field in ARRAYS:
            getattr(hop, field).flags.writeable = False
    meter = make()
    meter.prepare(bank())
    first = [meter.process(hop) for hop in wave], meter.reading()
    meter.reset()
    again = [meter.process(hop) for hop in wave], meter.reading()
    for one, other in zip([*again[0], again[1]], [*first[0], first[1]], strict=True):
        for name in other:
            np.testing.assert_array_equal(one[name], other[name])


@pytest.mark.parametrize("make", RULES)
def test_a_rule_that_was_reset_is_as_new(make: type) -> None:
    moments = through(4096, None, stream()).moments
    rule = make()
    rule.prepare(CHANNELS)

    def told() -> list[tuple[object, ...]]:
        events = [event for moment in moments for event in rule.moment(moment)]
        return [(event.kind, event.channel, event.started_s, event.ended_s, event.detail) for event in events]

    first = told()
    assert first
    rule.reset()
    assert told() == first


def test_an_open_loss_outlives_a_gap_of_the_source() -> None:
    kept = through(4096, (9_000, 9_601), stream(1.9))  # within the break of the third carrier
    losses = [event for event in kept.events if event.kind == "carrier-loss" and event.channel == "c2"]
    assert len(losses) == 1
    assert losses[0].ended_s is None


class BrokenMeter:
    """A meter that fails at every call."""

    quantities = ()

    def prepare(self, bank: object) -> None:
        pass

    def process(self, detected: Detected) -> dict[str, np.ndarray]:
        raise ArithmeticError("out of order")

    def reading(self) -> dict[str, np.ndarray]:
        raise ArithmeticError("out of order")

    def reset(self) -> None:
        pass


def test_a_meter_that_fails_costs_only_itself(
    monkeypatch: pytest.MonkeyPatch, caplog: pytest.LogCaptureFixture
) -> None:
    samples = stream()
    expected = through(4096, None, samples)
    monkeypatch.setattr("monitord.chain.METERS", (*METERS, BrokenMeter))
    kept = through(4096, None, samples)
    assert kept.tally.stage_failures["BrokenMeter"] == len(kept.moments) + len(kept.readings)
    assert [record.message for record in caplog.records if "BrokenMeter" in record.message] == [
        "BrokenMeter failed; its quantities are absent until it works again"
    ]
    for one, other in zip(kept.readings, expected.readings, strict=True):
        for name in other.values:
            np.testing.assert_array_equal(one.values[name], other.values[name])
