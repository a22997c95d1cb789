"""Real ZMQ over loopback: what is sent is what is read, and what is lost or wrong is told."""

import contextlib
import itertools
import json
import logging
import socket as plain_socket
import time
from collections.abc import Callable, Iterator
from typing import Any

import numpy as np
import pytest
import zmq
from hypothesis import given, settings
from hypothesis import strategies as st

from monitord.acquire.framing import REJECTIONS
from monitord.acquire.socket import SocketSource
from monitord.blocks import Block
from monitord.errors import SourceLost
from monitord.settings import Source

RATE = 48000
WITHIN_S = 10.0


class Sender:
    """The other end. A publisher waits for the subscription, so that nothing is sent before anyone listens."""

    def __init__(self, kind: int = zmq.XPUB, endpoint: str | None = None) -> None:
        self.context = zmq.Context()
        self.socket = self.context.socket(kind)
        self.socket.set(zmq.LINGER, 0)
        self.socket.set(zmq.SNDTIMEO, int(1000 * WITHIN_S))
        self.socket.set(zmq.RCVTIMEO, int(1000 * WITHIN_S))
        if endpoint is None:
            self.endpoint = f"tcp://127.0.0.1:{self.socket.bind_to_random_port('tcp://127.0.0.1')}"
        else:
            self.endpoint = endpoint

    def await_subscriber(self) -> None:
        assert self.socket.recv()[:1] == b"\x01"

    def send(self, *frames: bytes) -> None:
        self.socket.send_multipart(frames)

    def described(self, start: int, samples: np.ndarray, **changes: Any) -> None:
        fields = {"core:datatype": "cf32_le", "core:sample_rate": RATE, "core:sample_start": start}
        fields |= {f"core:{key}": value for key, value in changes.items()}
        self.send(json.dumps(fields).encode(), samples.tobytes())

    def close(self) -> None:
        self.socket.close()
        self.context.term()


@pytest.fixture
def sender() -> Iterator[Sender]:
    made = Sender()
    yield made
    made.close()


@pytest.fixture
def opened() -> Iterator[Callable[..., SocketSource]]:
    made = []

    def open_one(endpoint: str, **keys: Any) -> SocketSource:
        source = source_on(endpoint, **keys)
        made.append(source)
        source.open()
        return source

    yield open_one
    for source in made:
        source.close()


def source_on(endpoint: str, **keys: Any) -> SocketSource:
    keys = {"sample_rate_hz": RATE, "datatype": "cf32_le"} | keys
    return SocketSource(Source(kind="socket", endpoint=endpoint, **keys))


def read(source: SocketSource, frames: int) -> list[Block]:
    """Blocks until they hold `frames` samples; fails where they do not come."""
    blocks: list[Block] = []
    end = time.monotonic() + WITHIN_S
    while sum(len(block.samples) for block in blocks) < frames:
        assert time.monotonic() < end, "the samples did not come"
        block = source.read(0.2)
        if block is not None:
            blocks.append(block)
    return blocks


def until(true: Callable[[], bool]) -> None:
    end = time.monotonic() + WITHIN_S
    while not true():
        assert time.monotonic() < end, "it did not happen"
        time.sleep(0.002)  # counters have no event to wait for


def ramp(frames: int, first: int = 0) -> np.ndarray:
    return (np.arange(first, first + frames) / 1e6).astype(np.complex64)


def samples_of(blocks: list[Block]) -> np.ndarray:
    return np.concatenate([block.samples for block in blocks])


def spans(blocks: list[Block]) -> list[tuple[int, int, str, int]]:
    """(start, lost, reason, stream) of the blocks that do not simply follow on."""
    found, end, stream = [], None, None
    for block in blocks:
        if block.lost or (block.start, block.stream) != (end, stream):
            found.append((block.start, block.lost, block.lost_reason, block.stream))
        end, stream = block.end, block.stream
    return found


def test_a_subscriber_that_connects_reads_what_is_published(
    sender: Sender, opened: Callable[..., SocketSource]
) -> None:
    source = opened(sender.endpoint, center_hz=930e3)
    sender.await_subscriber()
    before = time.time()
    for k in range(20):
        sender.send(ramp(240, 240 * k).tobytes())
    blocks = read(source, 4800)
    np.testing.assert_array_equal(samples_of(blocks), ramp(4800))
    assert spans(blocks) == [(0, 0, "", 0)]
    assert {(block.rate_hz, block.center_hz) for block in blocks} == {(RATE, 930e3)}
    assert before - 0.1 <= blocks[0].utc <= time.time()
    assert source.counts.reconnects == 0


def test_a_puller_that_binds_reads_what_is_pushed(opened: Callable[..., SocketSource]) -> None:
    with plain_socket.create_server(("127.0.0.1", 0)) as free:
        endpoint = f"tcp://127.0.0.1:{free.getsockname()[1]}"
    source = opened(endpoint, pattern="pull", attach="bind", datatype="ri16_be")
    pusher = Sender(zmq.PUSH, endpoint)
    pusher.socket.connect(endpoint)
    pusher.send(np.array([1, -32768, 16384], ">i2").tobytes())
    (block,) = read(source, 3)
    np.testing.assert_array_equal(block.samples, np.array([2**-15, -1, 0.5], np.float32))
    assert block.clipped == 1
    assert source.real is True
    pusher.close()


def test_a_subscriber_that_binds_and_a_puller_that_connects_work_too(
    opened: Callable[..., SocketSource], tmp_path: Any
) -> None:
    endpoint = f"ipc://{tmp_path}/s"
    bound = opened(endpoint, attach="bind")
    publisher = Sender(zmq.XPUB, endpoint)
    publisher.socket.connect(endpoint)
    publisher.await_subscriber()
    publisher.send(ramp(10).tobytes())
    assert len(read(bound, 10)) == 1
    publisher.close()
    pusher = Sender(zmq.PUSH)
    connected = opened(pusher.endpoint, pattern="pull")
    pusher.send(ramp(10).tobytes())
    assert len(read(connected, 10)) == 1
    pusher.close()


def test_with_a_topic_only_its_messages_are_taken(
    sender: Sender, opened: Callable[..., SocketSource]
) -> None:
    source = opened(sender.endpoint, topic="am")
    sender.await_subscriber()
    sender.send(b"fm", ramp(7, 500).tobytes())
    sender.send(b"am", ramp(10).tobytes())
    np.testing.assert_array_equal(samples_of(read(source, 10)), ramp(10))
    assert sum(source.counts.rejected.values()) == 0


def test_a_described_stream_has_the_times_and_gaps_that_its_headers_tell(
    sender: Sender, opened: Callable[..., SocketSource]
) -> None:
    source = opened(sender.endpoint, framing="described")
    sender.await_subscriber()
    sender.described(1000, ramp(480), datetime="2026-01-01T00:00:00Z", frequency=0)
    sender.described(1480, ramp(480, 480), datetime="2026-01-01T00:00:00.010Z")
    sender.described(1960 + 77, ramp(480), datetime="2026-01-01T00:00:01Z")
    blocks = read(source, 1440)
    assert spans(blocks) == [(0, 0, "", 0), (960 + 77, 77, "sequence", 0)]
    assert (blocks[0].utc, blocks[-1].utc) == (1767225600.0, 1767225601.0)


def test_what_the_settings_leave_open_is_known_from_the_first_message(
    sender: Sender, opened: Callable[..., SocketSource]
) -> None:
    source = opened(sender.endpoint, framing="described", datatype=None)
    assert source.real is None
    sender.await_subscriber()
    sender.described(0, np.zeros(20, np.int8), datatype="ci8", frequency=5e6)
    (block,) = read(source, 10)
    assert (block.center_hz, source.center_hz, source.real) == (5e6, 5e6, False)


def test_every_wrong_message_is_counted_by_its_reason_and_the_rest_goes_on(
    sender: Sender, opened: Callable[..., SocketSource], caplog: pytest.LogCaptureFixture
) -> None:
    caplog.set_level(logging.WARNING, "monitord.source")
    source = opened(sender.endpoint, framing="described", center_hz=0.0)
    assert source.counts.rejected == dict.fromkeys(REJECTIONS, 0)
    sender.await_subscriber()
    bad = ramp(480)
    bad[100] = np.nan
    sender.described(0, ramp(480))
    sender.send(b"alone")
    sender.send(*[b"many"] * 50)
    sender.send(b"{", ramp(1).tobytes())
    sender.described(480, ramp(480), datatype="ci16_le")
    sender.described(480, ramp(480), sample_rate=44100)
    sender.described(480, ramp(480), frequency=1e6)
    sender.send(json.dumps({"core:datatype": "cf32_le"}).encode(), b"")
    sender.described(480, np.zeros(3, np.int8))
    sender.described(479, ramp(480))
    sender.described(480, bad)
    sender.described(960, ramp(480, 960))
    blocks = read(source, 960)
    np.testing.assert_array_equal(samples_of(blocks), np.concatenate([ramp(480), ramp(480, 960)]))
    assert spans(blocks) == [(0, 0, "", 0), (960, 480, "rejected", 0)]
    assert source.counts.rejected == {
        "frames": 2, "header": 2, "datatype": 1, "rate": 1, "frequency": 1, "length": 1, "non-finite": 1, "overlap": 1,
    }  # fmt: skip
    assert len(caplog.records) == 1, "told once a minute, not ten times"


def test_a_bad_bare_message_is_a_gap_of_its_length(
    sender: Sender, opened: Callable[..., SocketSource]
) -> None:
    source = opened(sender.endpoint)
    sender.await_subscriber()
    bad = ramp(100)
    bad[99] = np.inf
    for wave in (ramp(100), ramp(100, 100), bad, ramp(100, 300), bad, bad, ramp(100, 600)):
        sender.send(wave.tobytes())
    blocks = read(source, 400)
    assert spans(blocks) == [(0, 0, "", 0), (300, 100, "rejected", 0), (600, 200, "rejected", 0)]
    np.testing.assert_array_equal(
        samples_of(blocks), np.concatenate([ramp(200), ramp(100, 300), ramp(100, 600)])
    )
    assert source.counts.rejected["non-finite"] == 3


def test_a_reader_that_falls_behind_loses_the_whole_queue_as_one_gap(
    opened: Callable[..., SocketSource],
) -> None:
    pusher = Sender(zmq.PUSH)
    source = opened(pusher.endpoint, pattern="pull")
    for k in range(30):  # three seconds; two fit
        pusher.send(ramp(4800, 4800 * k).tobytes())
    pusher.send(b"odd")
    until(lambda: source.counts.rejected["length"] == 1)  # all has arrived
    blocks = read(source, 10 * 4800)
    assert spans(blocks) == [(20 * 4800, 20 * 4800, "overrun", 0)]
    np.testing.assert_array_equal(samples_of(blocks), ramp(48000, 96000))
    pusher.close()


def test_a_sender_that_counts_anew_is_a_reconnect(
    sender: Sender, opened: Callable[..., SocketSource]
) -> None:
    source = opened(sender.endpoint, framing="described")
    sender.await_subscriber()
    sender.described(10**9, ramp(100))
    sender.described(0, ramp(100))
    sender.described(100 + 3601 * RATE, ramp(100))
    assert spans(read(source, 300)) == [(0, 0, "", 0), (0, 0, "", 1), (0, 0, "", 2)]
    assert source.counts.reconnects == 2


def test_a_sender_that_went_away_and_came_back_is_a_new_stream(opened: Callable[..., SocketSource]) -> None:
    first = Sender()
    source = opened(first.endpoint)
    first.await_subscriber()
    first.send(ramp(100).tobytes())
    blocks = read(source, 100)
    first.close()
    again = Sender(endpoint=first.endpoint)
    again.socket.bind(first.endpoint)
    again.await_subscriber()
    again.send(ramp(50).tobytes())
    again.send(ramp(50, 50).tobytes())
    blocks += read(source, 100)
    assert spans(blocks) == [(0, 0, "", 0), (0, 0, "", 1)]
    assert source.counts.reconnects == 1
    again.close()


def test_a_stranger_that_speaks_no_zmq_does_no_harm(opened: Callable[..., SocketSource]) -> None:
    with plain_socket.create_server(("127.0.0.1", 0)) as free:
        port = free.getsockname()[1]
    endpoint = f"tcp://127.0.0.1:{port}"
    source = opened(endpoint, pattern="pull", attach="bind")
    pusher = Sender(zmq.PUSH, endpoint)
    pusher.socket.connect(endpoint)
    pusher.send(ramp(10).tobytes())
    read(source, 10)
    with plain_socket.create_connection(("127.0.0.1", port)) as stranger:
        stranger.sendall(b"GET / HTTP/1.1\r\n\r\n" + bytes(100))
        with contextlib.suppress(ConnectionResetError):
            while stranger.recv(100):  # until it is shown the door
                pass
    pusher.send(ramp(10, 10).tobytes())
    assert spans(read(source, 10)) == [(10, 0, "", 0)]
    assert source.counts.reconnects == 0
    pusher.close()


def test_an_address_in_use_is_one_clear_line(sender: Sender) -> None:
    source = source_on(sender.endpoint, attach="bind")
    with pytest.raises(SourceLost) as caught:
        source.open()
    assert sender.endpoint in str(caught.value)
    assert "in use" in str(caught.value)
    assert "\n" not in str(caught.value)
    source.close()


def test_reading_in_vain_returns_none_in_time_and_closing_takes_less_than_a_second(sender: Sender) -> None:
    source = source_on(sender.endpoint)
    source.open()
    began = time.monotonic()
    assert source.read(0.05) is None
    assert 0.04 < time.monotonic() - began < 1
    began = time.monotonic()
    source.close()
    source.close()
    assert time.monotonic() - began < 1
    assert not source.ended


def test_a_source_opened_again_begins_a_new_stream(
    sender: Sender, opened: Callable[..., SocketSource]
) -> None:
    source = opened(sender.endpoint)
    blocks = []
    for _ in range(2):
        sender.await_subscriber()
        sender.send(ramp(100).tobytes())
        blocks += read(source, 100)
        source.close()
        assert sender.socket.recv()[:1] == b"\x00"  # it has left
        source.open()
    assert spans(blocks) == [(0, 0, "", 0), (0, 0, "", 1)]


def test_a_receiver_that_dies_is_a_lost_source_and_no_silence(
    sender: Sender, opened: Callable[..., SocketSource], monkeypatch: pytest.MonkeyPatch
) -> None:
    def broken(frames: list[bytes]) -> None:
        raise MemoryError("no room")

    source = opened(sender.endpoint)
    monkeypatch.setattr(source._framing, "parse", broken)
    sender.await_subscriber()
    sender.send(ramp(100).tobytes())
    with pytest.raises(SourceLost, match="no room"):
        source.read(WITHIN_S)


@pytest.fixture(scope="module")
def pair() -> Iterator[tuple[Sender, SocketSource]]:
    pusher = Sender(zmq.PUSH)
    source = source_on(pusher.endpoint, pattern="pull", datatype="ci16_be")
    source.open()
    yield pusher, source
    source.close()
    pusher.close()


@settings(max_examples=30)
@given(cuts=st.lists(st.integers(1, 4999), max_size=12, unique=True))
def test_any_split_of_the_stream_into_messages_gives_the_same_samples(
    pair: tuple[Sender, SocketSource], cuts: list[int]
) -> None:
    pusher, source = pair
    codes = np.random.default_rng(3).integers(-32768, 32768, (5000, 2)).astype(">i2")
    for piece in np.split(codes, sorted(cuts)):
        pusher.send(piece.tobytes())
    blocks = read(source, 5000)
    got = samples_of(blocks)
    np.testing.assert_array_equal(got, (codes[:, 0] / 32768 + 1j * codes[:, 1] / 32768).astype(np.complex64))
    assert sum(block.clipped for block in blocks) == np.count_nonzero(
        ((codes == -32768) | (codes == 32767)).any(axis=1)
    )
    assert all(later.start == earlier.end for earlier, later in itertools.pairwise(blocks))
