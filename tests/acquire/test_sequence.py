"""Numbers and arrival times of messages become indices and times of samples."""

import itertools

import pytest

from monitord.acquire.framing import MessageError
from monitord.acquire.sequence import ArrivalClock, Place, SequenceTracker

RATE = 48000
HOUR = 3600 * RATE


def tracker(*numbers: int) -> SequenceTracker:
    """A tracker that has seen messages of 480 samples with these numbers, all on one connection."""
    made = SequenceTracker(RATE)
    for k, number in enumerate(numbers):
        made.place(number, 480, k == 0)
    return made


def test_counting_begins_at_0_whatever_the_senders_first_number() -> None:
    track = SequenceTracker(RATE)
    assert track.place(10**12, 480, True) == Place(0, 0, 0)
    assert track.place(10**12 + 480, 100, False) == Place(480, 0, 0)
    assert track.place(10**12 + 580, 100, False) == Place(580, 0, 0)


@pytest.mark.parametrize("jump", [1, 480, RATE, HOUR])
def test_a_jump_forward_of_up_to_an_hour_is_a_gap_of_exactly_that_many_samples(jump: int) -> None:
    assert tracker(1000).place(1480 + jump, 480, False) == Place(480 + jump, jump, 0)


def test_a_jump_forward_over_an_hour_is_a_new_stream() -> None:
    assert tracker(1000).place(1480 + HOUR + 1, 480, False) == Place(0, 0, 1)


def test_a_jump_back_to_less_than_an_hour_from_0_is_a_new_stream() -> None:
    for number in (0, 1, HOUR - 1):
        assert tracker(5 * HOUR).place(number, 480, False) == Place(0, 0, 1)


def test_a_jump_back_to_later_than_that_is_an_overlap() -> None:
    track = tracker(5 * HOUR)
    for number in (HOUR, 5 * HOUR - RATE, 5 * HOUR, 5 * HOUR + 479):
        with pytest.raises(MessageError) as caught:
            track.place(number, 480, False)
        assert caught.value.reason == "overlap"
    assert track.place(5 * HOUR + 480, 480, False) == Place(480, 0, 0), "and nothing of it was taken"


def test_a_sender_that_counts_from_0_again_is_a_new_stream_however_short_it_ran() -> None:
    assert tracker(0, 480).place(0, 480, False) == Place(0, 0, 1)
    assert tracker(0).place(0, 480, True) == Place(0, 0, 1)
    assert tracker(96000).place(240, 480, True) == Place(0, 0, 1)


@pytest.mark.parametrize("number", [480, 500, 959, 240])
def test_a_message_repeated_within_a_second_is_an_overlap_and_no_restart(number: int) -> None:
    with pytest.raises(MessageError):
        tracker(0, 480).place(number, 480, False)


def test_messages_without_numbers_follow_on_each_other_until_a_new_connection() -> None:
    track = SequenceTracker(RATE)
    assert track.place(None, 480, True) == Place(0, 0, 0)
    assert track.place(None, 7, False) == Place(480, 0, 0)
    assert track.place(None, 480, True) == Place(0, 0, 1)
    assert track.place(None, 480, False) == Place(480, 0, 1)


def test_the_clock_runs_with_the_samples_through_a_network_that_jitters() -> None:
    clock = ArrivalClock(RATE)
    assert clock.stamp(4800, 1000.1, True) == pytest.approx(1000.0)
    times = [clock.stamp(4800, 1000.2 + 0.1 * k + 0.05 * (k % 2), False) for k in range(20)]
    steps = [later - earlier for earlier, later in itertools.pairwise(times)]
    assert steps == pytest.approx([0.1] * 19, abs=1e-4)


def test_the_clock_follows_a_sender_whose_sample_clock_is_off() -> None:
    clock = ArrivalClock(RATE)
    for second in range(2000):  # 100 ppm slow
        utc = clock.stamp(RATE, 1001 + second * 1.0001, second == 0)
    assert utc == pytest.approx(1000 + 1999 * 1.0001, abs=0.02)


def test_the_clock_is_set_anew_after_a_gap_and_when_the_systems_clock_steps() -> None:
    clock = ArrivalClock(RATE)
    clock.stamp(RATE, 1001.0, True)
    assert clock.stamp(RATE, 1002.5, True) == pytest.approx(1001.5)
    assert clock.stamp(RATE, 5000.0, False) == pytest.approx(4999.0)
