"""Events across streams: a sender that starts afresh counts its seconds anew."""

import numpy as np

from monitord.blocks import Block
from monitord.chain import Chain
from monitord.notice import RULES
from monitord.notice.source import SourceRule
from monitord.stream import Stream
from tests import signals
from tests.runs import Kept, channel, run

RATE_HZ = 16_000.0


def test_a_loss_ends_with_its_stream_and_is_told_again_if_it_goes_on() -> None:
    kept = Kept()
    channels = [channel(carrier_hz=2_000.0, bandwidth_hz=1_000)]
    chain = Chain(channels, Stream(RATE_HZ, 0.0, False, True), [make() for make in RULES], [kept], kept.tally)
    for stream, breaks in enumerate(([(2.0, 9.0)], [(0.0, 2.0)])):
        wave = signals.am(RATE_HZ, 5.0, carrier_hz=2_003.0, c_n0_dbhz=70, breaks=breaks).astype(np.complex64)
        chain.process(Block(wave, RATE_HZ, 0.0, 0, None, stream=stream))
    chain.finish()
    assert kept.kinds() == ["carrier-loss", "carrier-loss"]
    assert all(event.ended_s is not None and event.ended_s > event.started_s for event in kept.events)


def test_the_absence_of_a_source_is_timed_by_the_clock() -> None:
    rule, block = SourceRule(), np.zeros(100, np.complex64)
    assert rule.block(Block(block, 100.0, 0.0, 400, None)) == []
    (opened,) = rule.silent(3.5, 5.0, None)
    assert rule.silent(4.0, 5.0, None) == ()
    (closed,) = rule.block(Block(block, 100.0, 0.0, 0, None, stream=1))
    assert closed.id == opened.id
    assert closed.ended_s is not None
    assert 3.5 <= closed.ended_s - opened.started_s < 5.0


def test_a_gap_that_is_open_ends_with_its_stream() -> None:
    rule, block = SourceRule(), np.zeros(100, np.complex64)
    (opened,) = rule.block(Block(block, 100.0, 0.0, 400, None, 100, "overrun"))
    (closed,) = rule.block(Block(block, 100.0, 0.0, 0, None, stream=1))
    assert (opened.kind, closed.kind, closed.id) == ("source-gap", "source-gap", opened.id)


def test_a_low_limit_raises_as_well_as_a_high_one() -> None:
    for limit in (0.3, 0.5, 0.85):
        limited = [channel(carrier_hz=2_000.0, bandwidth_hz=1_000, limits={"negative_peak": limit})]
        for depth, kinds in ((limit - 0.02, []), (limit + 0.05, ["overmodulation-negative"])):
            wave = signals.am(
                RATE_HZ,
                3.0,
                carrier_hz=2_003.0,
                modulation=lambda t, depth=depth: signals.tone(depth, 200.0, t),
                c_n0_dbhz=90,
            )
            assert run(wave, RATE_HZ, limited).kinds() == kinds
