"""Samples from a ZMQ socket: one thread receives and checks, a bounded queue holds, `read` decodes."""

import logging
import threading
import time

import zmq

from monitord.acquire.framing import REJECTIONS, Framing, MessageError
from monitord.acquire.message_queue import Entry, MessageQueue
from monitord.acquire.samples import Decoded
from monitord.acquire.sequence import ArrivalClock, SequenceTracker
from monitord.blocks import Block
from monitord.errors import SourceLost
from monitord.settings import Source
from monitord.stage import SourceCounts

log = logging.getLogger("monitord.source")

LOG_EVERY_S = 60.0
GATHER_S = 0.03
"""Messages shorter than this are left to gather for as long: waking up for each costs more than taking it."""
MOST_MESSAGES = 1000
LONGEST_FRAME = 64 * 2**20
KEPT_FRAMES = 4
"""One more than any framing has: a longer message is wrong anyway, and need not be held in memory."""


class _Rejections:
    """Counts rejected messages and logs them, at most once a minute. Called from both threads."""

    def __init__(self, counts: SourceCounts) -> None:
        self._counts = counts
        self._lock = threading.Lock()
        self._logged = float("-inf")

    def add(self, reason: str, why: str) -> None:
        with self._lock:
            self._counts.rejected[reason] += 1
            now = time.monotonic()
            if now - self._logged < LOG_EVERY_S:
                return
            self._logged = now
            total = sum(self._counts.rejected.values())
        log.warning("message rejected (%s): %s; rejected so far: %d", reason, why, total)


class _Receiver:
    """What the receiving thread does. Its memory outlives the thread: a socket opened again goes on counting."""

    def __init__(
        self, framing: Framing, queue: MessageQueue, counts: SourceCounts, rejections: _Rejections
    ) -> None:
        self._framing = framing
        self._queue = queue
        self._counts = counts
        self._rejections = rejections
        self._sequence = SequenceTracker(framing.rate_hz)
        self._clock = ArrivalClock(framing.rate_hz)
        self._connections = 0
        self._connected_anew = True
        self._gather = False
        self._stream = 0

    def run(self, socket: "zmq.Socket[bytes]", monitor: "zmq.Socket[bytes]") -> None:
        """Receive until the context is terminated, then close both sockets (which `term` waits for)."""
        poller = zmq.Poller()
        poller.register(socket, zmq.POLLIN)
        poller.register(monitor, zmq.POLLIN)
        try:
            while True:
                poller.poll()
                if self._gather:
                    time.sleep(GATHER_S)
                self._queue.put(self._drain(socket, monitor))
        except zmq.ContextTerminated:
            pass
        except Exception as error:  # whatever it was: a source that died must not look like a quiet one
            log.exception("receiving stopped")
            self._queue.fail(f"source: receiving stopped: {error}; opening it again may help")
        finally:
            monitor.close(linger=0)
            socket.close(linger=0)

    def _drain(self, socket: "zmq.Socket[bytes]", monitor: "zmq.Socket[bytes]") -> list[Entry]:
        """Take what has arrived, within reason."""
        taken = []
        for _ in range(MOST_MESSAGES):
            waiting = int(socket.get(zmq.EVENTS)) & zmq.POLLIN
            # Asked in this order: a connection's event is there before its first message is.
            while int(monitor.get(zmq.EVENTS)) & zmq.POLLIN:
                monitor.recv_multipart()
                self._connected()
            if not waiting:
                break
            entry = self._accept(_receive(socket), time.time())
            if entry is not None:
                taken.append(entry)
        return taken

    def _connected(self) -> None:
        self._connections += 1
        self._connected_anew = True
        if self._connections > 1:
            self._counts.reconnects += 1

    def _accept(self, frames: list[bytes], arrival: float) -> Entry | None:
        try:
            message = self._framing.parse(frames)
            place = self._sequence.place(message.start, message.frames, self._connected_anew)
        except MessageError as problem:
            self._rejections.add(problem.reason, str(problem))
            return None
        if place.stream != self._stream:
            self._stream = place.stream
            if not self._connected_anew:  # else it has been counted with the connection
                self._counts.reconnects += 1
        self._connected_anew = False
        self._gather = message.frames < GATHER_S * self._framing.rate_hz
        jump = place.start == 0 or place.lost > 0
        utc = self._clock.stamp(message.frames, arrival, jump) if message.utc is None else message.utc
        return Entry(
            data=message.data,
            frames=message.frames,
            form=message.form,
            center_hz=message.center_hz,
            start=place.start,
            stream=place.stream,
            utc=utc,
            gap="sequence" if place.lost else "",
        )


def _receive(socket: "zmq.Socket[bytes]") -> list[bytes]:
    frames = [socket.recv()]
    while socket.get(zmq.RCVMORE):
        frame = socket.recv()
        if len(frames) < KEPT_FRAMES:
            frames.append(frame)
    return frames


class SocketSource:
    """Messages of samples from a ZMQ publisher (SUB) or pusher (PULL), as INTERFACE "Socket framing" says.

    A full queue (2 s of samples) is dropped whole, as one gap ("overrun"). A jump of `core:sample_start` is a gap
    ("sequence"), a message that holds a non-finite sample too ("rejected"). Without numbers (bare) a new
    connection begins a new stream, and what ZMQ itself drops on the way cannot be seen.
    """

    def __init__(self, settings: Source) -> None:
        self.settings = settings
        self.counts = SourceCounts(rejected=dict.fromkeys(REJECTIONS, 0))
        self._framing = Framing(settings)
        self._queue = MessageQueue(self._framing.rate_hz)
        self._rejections = _Rejections(self.counts)
        self._receiver = _Receiver(self._framing, self._queue, self.counts, self._rejections)
        self._context: zmq.Context[zmq.Socket[bytes]] | None = None
        self._thread: threading.Thread | None = None
        self._stream = 0
        self._end = 0
        self._rejected_before = False

    @property
    def rate_hz(self) -> float:
        """Samples per second, as set."""
        return self._framing.rate_hz

    @property
    def center_hz(self) -> float:
        """What 0 Hz of the samples stands for: as set, or as the first good message says."""
        return self._framing.center_hz

    @property
    def real(self) -> bool | None:
        """A real IF, or IQ; None until the first good message says so."""
        return self._framing.format.real if self._framing.format else None

    @property
    def ended(self) -> bool:
        """Never: a sender that is silent may speak again."""
        return False

    def open(self) -> None:
        """Attach the socket and start receiving. Raises SourceLost."""
        self.close()
        context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        socket = context.socket(zmq.SUB if self.settings.pattern == "sub" else zmq.PULL)
        try:
            monitor = socket.get_monitor_socket(zmq.EVENT_HANDSHAKE_SUCCEEDED)
            self._attach(socket)
        except zmq.ZMQError as error:
            context.destroy(linger=0)
            raise SourceLost(self._attach_problem(error)) from None
        self._context = context
        self._thread = threading.Thread(
            target=self._receiver.run, args=(socket, monitor), name="source-socket", daemon=True
        )
        self._thread.start()

    def _attach(self, socket: "zmq.Socket[bytes]") -> None:
        endpoint = str(self.settings.endpoint)
        socket.set(zmq.LINGER, 0)
        socket.set(zmq.MAXMSGSIZE, LONGEST_FRAME)
        socket.set(zmq.HEARTBEAT_IVL, 2000)  # a peer that vanished without a word is noticed and sought anew
        socket.set(zmq.HEARTBEAT_TIMEOUT, 6000)
        socket.set(zmq.RECONNECT_IVL, 100)
        socket.set(zmq.RECONNECT_IVL_MAX, 2000)
        socket.set(zmq.IPV6, int("[" in endpoint))
        if self.settings.pattern == "sub":
            socket.set(zmq.SUBSCRIBE, (self.settings.topic or "").encode())
        if self.settings.attach == "bind":
            socket.bind(endpoint)
        else:
            socket.connect(endpoint)

    def _attach_problem(self, error: zmq.ZMQError) -> str:
        verb = self.settings.attach
        advice = "it must be the address that the sender binds"
        if verb == "bind":
            advice = "it must be an address of this machine that no other program holds"
        return f'source.endpoint = "{self.settings.endpoint}": cannot {verb}: {error.strerror}; {advice}'

    def close(self) -> None:
        """Stop receiving and forget what was not read."""
        context, self._context = self._context, None
        if context is not None:
            context.term()  # wakes the receiver; returns once that has closed its sockets
        thread, self._thread = self._thread, None
        if thread is not None:
            thread.join()
        self._queue.clear()

    def read(self, timeout_s: float, wanted: int = 1) -> Block | None:
        """Hand over what follows without a break, about 0.1 s at most unless one message is longer, or None.

        Waits for `wanted` samples: waking up costs more than a message does.
        Raises SourceLost where receiving has stopped.
        """
        deadline = time.monotonic() + timeout_s
        while entries := self._queue.take(deadline - time.monotonic(), wanted):
            block = self._decode(entries)
            if block is not None:
                return block
        return None

    def _decode(self, entries: list[Entry]) -> Block | None:
        data = entries[0].data if len(entries) == 1 else b"".join(entry.data for entry in entries)
        decoded = entries[0].form.decode(data)
        if decoded.first_bad is None:
            return self._block(entries[0], decoded)
        return self._without_bad(entries, decoded.first_bad)

    def _without_bad(self, entries: list[Entry], first_bad: int) -> Block | None:
        """Reject the message that holds the bad sample; the block of those before it; those after go back."""
        bad, position = 0, first_bad
        while position >= entries[bad].frames:
            position -= entries[bad].frames
            bad += 1
        self._rejections.add("non-finite", f"its sample {position} is not a usable number")
        self._queue.put_back(entries[bad + 1 :])
        block = self._decode(entries[:bad]) if bad else None
        self._rejected_before = True
        return block

    def _block(self, first: Entry, decoded: Decoded) -> Block:
        expected = self._end if first.stream == self._stream else 0
        lost = first.start - expected + first.orphans
        reason = first.gap or ("rejected" if self._rejected_before else "overrun")
        self._stream, self._end = first.stream, first.start + len(decoded.samples)
        self._rejected_before = False
        return Block(
            samples=decoded.samples,
            rate_hz=self.rate_hz,
            center_hz=first.center_hz,
            start=first.start,
            utc=first.utc,
            lost=lost,
            lost_reason=reason if lost else "",
            clipped=decoded.clipped,
            stream=first.stream,
        )
