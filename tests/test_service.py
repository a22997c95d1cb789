"""The daemon as its users meet it: a process, fed over ZMQ, read over HTTP, stopped by signals."""

import signal
import threading
import time

import numpy as np
import pytest

from tests import data
from tests.station import daemon, publisher, send_in_real_time, subscribed

RATE_HZ = 48_000
CARRIER_HZ = 12_000.0


def settings(endpoint: str, extra: str = "") -> str:
    return f"""
[source]
kind = "socket"
sample_rate_hz = {RATE_HZ}
endpoint = "{endpoint}"
datatype = "cf32_le"

[[channel]]
name = "air"
carrier_hz = {CARRIER_HZ}
{extra}
"""


def transmission(envelope: np.ndarray, *, offset_hz: float = 4.2, c_n0_dbhz: float = 90.0) -> np.ndarray:
    """Complex baseband A e(t) exp(j 2 pi f t) plus white noise, A = 0.1 (-20 dBFS)."""
    count, rng = np.arange(len(envelope)), np.random.default_rng(7)
    carrier = 0.1 * envelope * np.exp(2j * np.pi * (CARRIER_HZ + offset_hz) * count / RATE_HZ)
    spread = 0.1 * np.sqrt(RATE_HZ / 10 ** (c_n0_dbhz / 10) / 2)
    return carrier + spread * (rng.standard_normal(len(envelope)) + 1j * rng.standard_normal(len(envelope)))


def tone(depth, seconds: float) -> np.ndarray:
    time_s = np.arange(round(seconds * RATE_HZ)) / RATE_HZ
    depths = depth(time_s) if callable(depth) else depth
    return 1 + depths * np.cos(2 * np.pi * 1000 * time_s)


class Sending:
    """Sends in a thread, so that the test can read meanwhile."""

    def __init__(self, sender, samples: np.ndarray) -> None:
        self.begin = None
        self._stop = threading.Event()
        self._thread = threading.Thread(target=self._run, args=(sender, samples))
        self.begin = time.monotonic()
        self._thread.start()

    def _run(self, sender, samples: np.ndarray) -> None:
        send_in_real_time(sender, samples, RATE_HZ, stop=self._stop)

    def __enter__(self) -> "Sending":
        return self

    def __exit__(self, *failure: object) -> None:
        self._stop.set()
        self._thread.join()


def test_a_stream_is_measured_a_burst_told_within_300_ms_and_a_cut_carrier_within_1_s(tmp_path):
    def depth(time_s: np.ndarray) -> np.ndarray:
        return np.where((time_s >= 5.0) & (time_s < 5.5), 1.10, 0.5)

    envelope = tone(depth, 12.0)
    envelope[8 * RATE_HZ : 10 * RATE_HZ] = 0
    with publisher() as (sender, endpoint), daemon(tmp_path, settings(endpoint)) as station:
        before = station.metrics()
        assert before["overmodulation_events_total", "air", "negative"] == 0
        assert before["carrier_present", "air"] == 0
        assert before["source_lost_samples_total", "sequence"] == 0
        assert ("carrier_level_dbfs", "air") not in before
        subscribed(sender)
        with Sending(sender, transmission(envelope)) as sending:
            first = station.wait_for(lambda page: ("carrier_level_dbfs", "air") in page, 5)
            assert time.monotonic() - sending.begin < 3.0
            good = station.wait_for(lambda page: page["reading_valid", "air"] == 1, 5)
            assert good["carrier_level_dbfs", "air"] == pytest.approx(-20.0, abs=0.02)
            assert good["carrier_frequency_offset_hertz", "air"] == pytest.approx(4.2, abs=0.005)
            assert good["modulation_negative_peak_ratio", "air"] == pytest.approx(0.5, abs=0.02)
            assert first["carrier_present", "air"] == 1

            told = station.wait_for(
                lambda page: page["overmodulation_events_total", "air", "negative"] == 1, 6
            )
            assert time.monotonic() - sending.begin - 5.0 < 0.3
            assert told["alarm_active", "overmodulation-negative", "air"] == 1

            lost = station.wait_for(lambda page: page["carrier_present", "air"] == 0, 6)
            assert time.monotonic() - sending.begin - 8.0 < 1.0
            assert lost["carrier_loss_events_total", "air"] == 1
            assert lost["source_up",] == 1
            assert station.status("/healthz") == 200
            gone = station.wait_for(lambda page: ("carrier_level_dbfs", "air") not in page, 2)
            assert not [key for key in gone if key[0].startswith("modulation_") and "slot_peak" not in key[0]]

            back = station.wait_for(lambda page: page["carrier_present", "air"] == 1, 4)
            assert back["overmodulation_events_total", "air", "negative"] == 1
            assert back["overmodulation_events_total", "air", "positive"] == 0
            assert back["carrier_loss_events_total", "air"] == 1


def test_a_silent_source_is_told_apart_from_a_silent_carrier(tmp_path):
    with publisher() as (sender, endpoint), daemon(tmp_path, settings(endpoint)) as station:
        subscribed(sender)
        with Sending(sender, transmission(tone(0.5, 3.3))):
            station.wait_for(lambda page: page["reading_valid", "air"] == 1)
            page = station.wait_for(lambda page: page["source_up",] == 0)
        assert page["reading_valid", "air"] == page["carrier_present", "air"] == 0
        assert page["carrier_loss_events_total", "air"] == 0
        assert page["source_alarm_active", "source-lost"] == 1
        assert ("carrier_level_dbfs", "air") not in page
        assert station.status("/healthz") == 503
        with Sending(sender, transmission(tone(0.5, 6.0))):
            page = station.wait_for(lambda page: page["reading_valid", "air"] == 1)
        assert page["source_up",] == 1


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_a_signal_stops_it_cleanly_within_3_s(tmp_path, number):
    with daemon(tmp_path, '[source]\nkind = "simulated"\n') as station:
        station.wait_for(lambda page: page["source_up",] == 1)
        begin = time.monotonic()
        assert station.stop(number) == 0
        assert time.monotonic() - begin < 3.0


def test_messages_that_were_not_agreed_are_counted_and_cost_nothing(tmp_path):
    good = transmission(tone(0.5, 4.0)).astype(np.complex64)
    bad = good[:2400].copy()
    bad[17] = np.nan
    with publisher() as (sender, endpoint), daemon(tmp_path, settings(endpoint)) as station:
        subscribed(sender)
        sender.send(b"seven..")
        sender.send(bad.tobytes())
        sender.send_multipart([b"two", b"frames"])
        with Sending(sender, good):
            page = station.wait_for(lambda page: page["reading_valid", "air"] == 1)
        rejected = {
            key[1]: value for key, value in page.items() if key[0] == "source_rejected_messages_total"
        }
        assert sum(rejected.values()) == 3
        assert rejected["non-finite"] == 1
        assert page["carrier_level_dbfs", "air"] == pytest.approx(-20.0, abs=0.02)


def test_a_taken_port_is_told_in_one_line(tmp_path, run_monitord):
    with daemon(tmp_path, '[source]\nkind = "simulated"\n') as station:
        path = tmp_path / "second.toml"
        path.write_text(f'[source]\nkind = "simulated"\n[http]\nlisten = "127.0.0.1:{station.port}"\n')
        done = run_monitord("run", str(path))
    assert done.returncode == 1
    assert "http" in done.stderr
    assert "Traceback" not in done.stderr


def test_an_hf_voice_off_the_air_reads_as_its_index_says(tmp_path):
    """The envelope of an HF time-signal station with speech, put on a carrier at a made-up offset.

    Published with the data: voice in seconds 1-10, +62.7 / -87.7 %.
    """
    envelope, rate_hz = data.hf_voice_envelope()
    wave = data.on_a_carrier(envelope[: 12 * rate_hz], rate_hz, RATE_HZ, CARRIER_HZ - 31.7)
    heard = []
    with publisher() as (sender, endpoint), daemon(tmp_path, settings(endpoint)) as station:
        subscribed(sender)
        with Sending(sender, wave) as sending:

            def ten_seconds(page) -> bool:
                heard.append(page)
                return time.monotonic() - sending.begin > 10.0

            station.wait_for(ten_seconds, 30)
    peaks = [
        [page[f"modulation_{polarity}_peak_ratio", "air"] for page in heard if page["reading_valid", "air"]]
        for polarity in ("positive", "negative")
    ]
    assert heard[-1]["carrier_frequency_offset_hertz", "air"] == pytest.approx(-31.7, abs=0.05)
    assert peaks[0][-1] == pytest.approx(0.627, abs=0.015)
    assert peaks[1][-1] == pytest.approx(0.877, abs=0.015)
