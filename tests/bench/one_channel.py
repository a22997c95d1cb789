"""One channel at 48 kHz: load and memory of the live daemon, the chain's time over its bare FFTs, each meter's share.

python -m tests.bench.one_channel
"""

import re
import tempfile
import threading
import time
from pathlib import Path

import numpy as np
import scipy.fft

from monitord.blocks import Baseband, Block, Span
from monitord.chain import Chain
from monitord.condition.grid import Branch, Grid
from monitord.detect import DETECTORS
from monitord.measure import METERS
from monitord.notice import RULES
from monitord.publish.tally import Tally
from monitord.settings import Channel
from monitord.stream import Stream
from tests.station import daemon, publisher, send_in_real_time, subscribed
from tests.trials import bank_of, received, tones

RATE_HZ = 48_000
CARRIER_HZ = 12_000.0
LIVE_S = 20.0
HOPS = 600
SHARE_HOPS = 200

SETTINGS = """
[source]
kind = "socket"
sample_rate_hz = 48000
endpoint = "{endpoint}"
datatype = "cf32_le"

[[channel]]
name = "air"
carrier_hz = 12000
"""


def programme(seconds: float) -> np.ndarray:
    """A carrier with noise-like programme of about 30 % rms, at C/N0 90 dB-Hz."""
    count, rng = np.arange(round(seconds * RATE_HZ)), np.random.default_rng(3)
    spectrum = np.fft.rfft(rng.standard_normal(len(count)))
    spectrum[np.fft.rfftfreq(len(count), 1 / RATE_HZ) > 4500] = 0
    audio = np.fft.irfft(spectrum, len(count))
    wave = 0.1 * (1 + 0.2 * audio / audio.std()) * np.exp(2j * np.pi * (CARRIER_HZ + 3.3) * count / RATE_HZ)
    noise = rng.standard_normal(len(count)) + 1j * rng.standard_normal(len(count))
    return np.asarray(wave + 0.1 * np.sqrt(RATE_HZ / 1e9 / 2) * noise, np.complex64)


def live() -> None:
    """The daemon over a real socket: CPU share, peak memory, time to the first reading."""
    samples = programme(LIVE_S + 4)
    with tempfile.TemporaryDirectory() as folder, publisher() as (sender, endpoint):
        begin = time.monotonic()
        with daemon(Path(folder), SETTINGS.format(endpoint=endpoint)) as station:
            subscribed(sender)
            stop = threading.Event()
            sending = threading.Thread(
                target=send_in_real_time, args=(sender, samples, RATE_HZ), kwargs={"stop": stop}
            )
            sending.start()
            station.wait_for(lambda page: ("carrier_level_dbfs", "air") in page)
            print(f"first reading after start of the process   {time.monotonic() - begin:8.2f} s")
            before, clock = station.metrics(), time.monotonic()
            time.sleep(LIVE_S)
            after, lasted = station.metrics(), time.monotonic() - clock
            stop.set()
            sending.join()
            load = (after["process_cpu_seconds_total",] - before["process_cpu_seconds_total",]) / lasted
            print(f"CPU of the daemon, live, two scrapes        {100 * load:8.2f} % of a core")
            print(f"chain_busy_ratio                            {100 * after['chain_busy_ratio',]:8.2f} %")
            status = Path(f"/proc/{station.process.pid}/status").read_text()
            station.stop()
    peak = int(re.search(r"VmHWM:\s+(\d+) kB", status).group(1)) / 1024
    print(f"peak resident memory                        {peak:8.0f} MB")


def ratio() -> None:
    """The chain over the bare transforms of its sizes: one forward and one inverse per hop."""
    samples = programme(HOPS / 10)
    channel = Channel(name="air", carrier_hz=CARRIER_HZ)
    tally = Tally()
    chain = Chain((channel,), Stream(RATE_HZ, 0.0, False, True), [make() for make in RULES], (), tally)
    grid = Grid.of(RATE_HZ)
    branch = Branch.of(grid, channel.bandwidth_hz, channel.acquire_hz)
    frame, points = samples[: grid.frame].copy(), samples[None, : branch.points].copy()
    for _ in range(20):
        scipy.fft.fft(frame)
        scipy.fft.ifft(points)
    begin = time.process_time()
    for _ in range(HOPS):
        scipy.fft.fft(frame)
        scipy.fft.ifft(points)
    floor = time.process_time() - begin
    begin = time.process_time()
    for start in range(0, len(samples), 4800):
        chain.process(Block(samples[start : start + 4800], RATE_HZ, 0.0, start, None))
    spent = time.process_time() - begin
    print(f"chain, {len(METERS)} meters, per second of signal      {1000 * spent / (HOPS / 10):8.2f} ms")
    print(f"bare transforms, per second of signal       {1000 * floor / (HOPS / 10):8.2f} ms")
    print(f"ratio                                       {spent / floor:8.1f}")
    for stage, seconds in tally.stage_seconds.items():
        print(f"  {stage:12s}                              {seconds / floor:8.1f}")


def shares(rows: int) -> None:
    """What each meter takes of the time of all, and all meters of the time of detection, for a bank of `rows`."""
    bank = bank_of(rows)
    rng = np.random.default_rng(1)
    wave = received(bank, tones(bank, SHARE_HOPS, 0.6, rng), np.full(rows, 3.0), 90.0, rng)
    detector = DETECTORS["synchronous"]()
    detector.prepare(bank)
    meters = [make() for make in METERS]
    for meter in meters:
        meter.prepare(bank)
    spent, detecting = dict.fromkeys((type(meter).__name__ for meter in meters), 0.0), 0.0
    for index in range(SHARE_HOPS):
        part = wave[:, index * bank.frames : (index + 1) * bank.frames]
        span = Span(index, index * 4800, (index + 1) * 4800, RATE_HZ, None, index == 0)
        begin = time.process_time()
        detected = detector.process(Baseband(part, bank.rate_hz, span))
        detecting += time.process_time() - begin
        for meter in meters:
            begin = time.process_time()
            meter.process(detected)
            if index % 10 == 9:
                meter.reading()
            spent[type(meter).__name__] += time.process_time() - begin
    whole = sum(spent.values())
    print(f"{rows} channels of a tone: all meters over detection {whole / detecting:8.1f}")
    for name, seconds in sorted(spent.items(), key=lambda item: -item[1]):
        print(f"  {name:24s} {100 * seconds / whole:6.1f} % of the meters' time")


if __name__ == "__main__":
    live()
    ratio()
    shares(1)
    shares(60)
