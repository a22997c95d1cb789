"""The queue between receiver and reader joins what belongs together, and loses only all at once."""

import threading
import time

import pytest

from monitord.acquire.message_queue import Entry, MessageQueue
from monitord.acquire.samples import FORMATS
from monitord.errors import SourceLost

RATE = 1000.0


def entry(start: int, frames: int = 50, **changes: object) -> Entry:
    given = {
        "data": bytes(frames),
        "form": FORMATS["ci8"],
        "center_hz": 0.0,
        "stream": 0,
        "utc": 0.0,
    } | changes
    return Entry(frames=frames, start=start, **given)


def starts(entries: list[Entry]) -> list[int]:
    return [one.start for one in entries]


def test_small_messages_are_taken_together_up_to_a_tenth_of_a_second() -> None:
    queue = MessageQueue(RATE)
    for k in range(5):
        queue.put([entry(40 * k, 40)])
    assert [starts(queue.take(0)) for _ in range(4)] == [[0, 40], [80, 120], [160], []]


@pytest.mark.parametrize("change", [{"gap": "sequence"}, {"stream": 1}, {"form": FORMATS["ri8"]}])
def test_what_does_not_follow_on_is_taken_by_itself(change: dict[str, object]) -> None:
    queue = MessageQueue(RATE)
    queue.put([entry(0, 10)])
    queue.put([entry(10, 10, **change)])
    assert starts(queue.take(0)) == [0]
    assert starts(queue.take(0)) == [10]


def test_a_full_queue_is_dropped_whole_and_the_next_entry_bears_the_gap() -> None:
    queue = MessageQueue(RATE)
    for k in range(41):  # 40 of 50 samples are just two seconds
        queue.put([entry(50 * k)])
    (left,) = queue.take(0)
    assert (left.start, left.gap) == (2000, "overrun")
    assert queue.take(0) == []


def test_an_overrun_across_a_new_stream_still_counts_what_the_old_one_lost() -> None:
    queue = MessageQueue(RATE)
    queue.put([entry(0, 1500)])
    queue.put([entry(0, 400, stream=1)])
    queue.put([entry(400, 400, stream=1)])
    (left,) = queue.take(0)
    assert (left.start, left.stream, left.gap, left.orphans) == (400, 1, "overrun", 1500)


def test_one_message_longer_than_the_queue_is_taken_all_the_same() -> None:
    queue = MessageQueue(RATE)
    queue.put([entry(0, 5000)])
    assert starts(queue.take(0)) == [0]


def test_what_is_put_back_is_taken_next() -> None:
    queue = MessageQueue(RATE)
    for k in range(3):
        queue.put([entry(40 * k, 40)])
    taken = queue.take(0)
    queue.put_back(taken[1:])
    assert starts(queue.take(0)) == [40, 80]


def test_a_reader_that_waits_is_woken_by_the_first_message() -> None:
    queue = MessageQueue(RATE)
    timer = threading.Timer(0.05, queue.put, [[entry(0)]])
    timer.start()
    began = time.monotonic()
    assert starts(queue.take(10)) == [0]
    assert time.monotonic() - began < 5
    timer.join()


def test_a_failure_is_told_after_what_came_before_it() -> None:
    queue = MessageQueue(RATE)
    queue.put([entry(0)])
    queue.fail("gone")
    assert starts(queue.take(0)) == [0]
    with pytest.raises(SourceLost, match="gone"):
        queue.take(10)
