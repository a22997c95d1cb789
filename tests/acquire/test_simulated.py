"""The built-in station, demodulated here by means of its own: what is on the air, and when."""

import subprocess
import sys
import time
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal

import numpy as np
import pytest
from numpy.typing import NDArray

from monitord.acquire import scenario
from monitord.acquire.programme import LOOP_FRAMES, PASSAGE_FRAMES, make_loop
from monitord.acquire.simulated import SimulatedSource
from monitord.blocks import Block, Complex
from monitord.errors import SourceLost
from monitord.settings import Channel, Source, built_in_channels

RATE_HZ = 48_000
ALDER, BIRCH, CEDAR = (channel.carrier_hz for channel in built_in_channels())


def station(pace: Literal["flat-out", "real-time"] = "flat-out") -> SimulatedSource:
    source = SimulatedSource(Source(kind="simulated", pace=pace), built_in_channels())
    source.open()
    return source


def blocks(source: SimulatedSource) -> Iterator[Block]:
    while True:
        block = source.read(1.0)
        assert block is not None
        yield block


def received(source: SimulatedSource, count: int) -> Complex:
    return np.concatenate([block.samples for block, _ in zip(blocks(source), range(count), strict=False)])


@pytest.fixture(scope="module")
def turn() -> Complex:
    """All that the station sends in one turn of its story."""
    return received(station(), round(scenario.TURN_S / 0.05))


@dataclass(frozen=True)
class Heard:
    """A stretch of one carrier: its envelope (carrier = 1), amplitude, and offset in Hz."""

    envelope: NDArray[np.float64]
    quadrature: NDArray[np.float64]
    amplitude: float
    offset_hz: float


def tuned(samples: Complex, carrier_hz: float, start_s: float, end_s: float) -> NDArray[np.complex128]:
    """One channel of a stretch, 4.9 kHz to each side."""
    index = np.arange(round(start_s * RATE_HZ), round(end_s * RATE_HZ))
    spectrum = np.fft.fft(samples[index] * np.exp(-2j * np.pi * carrier_hz / RATE_HZ * index))
    spectrum[np.abs(np.fft.fftfreq(len(index), 1 / RATE_HZ)) > 4_900] = 0
    return np.asarray(np.fft.ifft(spectrum))


def heard(samples: Complex, carrier_hz: float, start_s: float, end_s: float) -> Heard:
    """Follow the carrier by a smooth curve through its phase, and look along it and across."""
    channel = tuned(samples, carrier_hz, start_s, end_s)
    steps = channel.reshape(-1, RATE_HZ // 20).mean(axis=1)
    at_s = (np.arange(len(steps)) + 0.5) / 20
    phase = np.polynomial.Polynomial.fit(at_s, np.unwrap(np.angle(steps)), 5)
    channel *= np.exp(-1j * phase(np.arange(len(channel)) / RATE_HZ))
    inner = channel[RATE_HZ // 20 : -RATE_HZ // 20]
    amplitude = float(inner.real.mean())
    offset_hz = float(phase.deriv()(at_s.mean()) / (2 * np.pi))
    return Heard(inner.real / amplitude, inner.imag / amplitude, amplitude, offset_hz)


def density_db(samples: Complex, low_hz: float, high_hz: float) -> float:
    window = np.hanning(len(samples))
    power = np.abs(np.fft.fft(samples * window)) ** 2 / (len(samples) * np.sum(window**2))
    frequency = np.fft.fftfreq(len(samples), 1 / RATE_HZ)
    inside = (frequency >= low_hz) & (frequency < high_hz)
    return float(10 * np.log10(power[inside].sum() / (high_hz - low_hz)))


def test_its_three_channels_lie_apart_and_inside_the_span() -> None:
    carriers = sorted(channel.carrier_hz for channel in built_in_channels())
    assert len({channel.name for channel in built_in_channels()}) == 3
    assert np.diff(carriers).min() >= 12_000
    assert max(map(abs, carriers)) + 5_000 + 100 < 24_000


def test_blocks_of_50_ms_follow_each_other_without_a_gap_and_with_the_time_of_day() -> None:
    source = station()
    now = time.time()
    for number, block in zip(range(5), blocks(source), strict=False):
        assert block.samples.dtype == np.complex64
        assert (len(block.samples), block.start, block.lost) == (2_400, 2_400 * number, 0)
        assert (block.rate_hz, block.center_hz) == (48_000, 0)
        assert block.utc == pytest.approx(now + 0.05 * number, abs=0.5)
    assert not source.ended


def test_every_start_gives_the_same_samples_and_a_stream_of_its_own() -> None:
    source = station()
    first = source.read(1)
    source.close()
    source.close()
    source.open()
    again = source.read(1)
    assert first is not None and again is not None
    assert np.array_equal(first.samples, again.samples)
    assert (first.stream, again.stream, again.start) == (0, 1, 0)


@pytest.mark.parametrize("carrier_hz", [ALDER, BIRCH, CEDAR])
def test_each_carrier_is_a_few_hertz_off_and_stands_80_to_95_db_above_the_noise_density(
    turn: Complex, carrier_hz: float
) -> None:
    channel = heard(turn, carrier_hz, 8, 12)
    c_n0_dbhz = 20 * np.log10(channel.amplitude) - density_db(turn[: 4 * RATE_HZ], 19_000, 23_000)
    assert 80 < c_n0_dbhz < 95
    assert 0.1 < abs(channel.offset_hz) < 5


def test_frequency_and_level_wander_by_tenths(turn: Complex) -> None:
    stretches = [heard(turn, ALDER, start, start + 4) for start in range(24, 104, 8)]
    assert 0.05 < np.ptp([stretch.offset_hz for stretch in stretches]) < 1
    assert 0.05 < np.ptp([20 * np.log10(stretch.amplitude) for stretch in stretches]) < 1


def test_one_flat_noise_floor_lies_between_the_channels_and_beyond(turn: Complex) -> None:
    beyond = density_db(turn[: 19 * RATE_HZ], 19_000, 23_000)
    for low_hz, high_hz in ((-23_000, -19_500), (-9_000, -6_000), (4_500, 7_500)):
        assert density_db(turn[: 19 * RATE_HZ], low_hz, high_hz) == pytest.approx(beyond, abs=0.3)


def test_the_carriers_phase_goes_on_from_block_to_block(turn: Complex) -> None:
    silent = tuned(turn, BIRCH, 32, 40)[2_400:-2_400].reshape(-1, 480).mean(axis=1)
    bends = np.diff(np.unwrap(np.angle(silent)), 2)
    assert np.abs(bends).max() < 0.01


@pytest.mark.parametrize("carrier_hz", [ALDER, BIRCH, CEDAR])
def test_programme_moves_like_programme_and_stays_below_its_limits(turn: Complex, carrier_hz: float) -> None:
    channel = heard(turn, carrier_hz, 4, 18)
    modulation = channel.envelope - 1
    assert 0.6 < -modulation.min() <= 0.96
    assert 0.6 < modulation.max() <= 1.06
    assert 0.1 < np.std(modulation) < 0.4
    loudness = np.std(modulation[: 4_800 * 138].reshape(-1, 4_800), axis=1)
    assert np.quantile(loudness, 0.9) > 1.7 * np.quantile(loudness, 0.1)
    assert np.std(channel.quadrature) < 0.02


@pytest.mark.parametrize("carrier_hz", [ALDER, BIRCH, CEDAR])
def test_programme_has_most_of_its_power_below_1_khz_and_nothing_above_4500_hz(
    turn: Complex, carrier_hz: float
) -> None:
    channel = heard(turn, carrier_hz, 4, 18)
    power = np.abs(np.fft.rfft((channel.envelope - 1) * np.hanning(len(channel.envelope)))) ** 2
    frequency = np.fft.rfftfreq(len(channel.envelope), 1 / RATE_HZ)
    share = [power[(frequency >= low) & (frequency < low + 200)].sum() for low in (2_000, 4_600)]
    assert power[frequency < 1_000].sum() > 0.6 * power.sum()
    assert share[0] > 30 * share[1]


@pytest.mark.parametrize(("carrier_hz", "at_s"), [(ALDER, 20), (CEDAR, 100)])
def test_a_passage_of_half_a_second_reverses_the_carrier_by_an_eighth(
    turn: Complex, carrier_hz: float, at_s: float
) -> None:
    envelope = heard(turn, carrier_hz, at_s - 1.75, at_s + 2.25).envelope
    reversed_at_s = at_s - 1.7 + np.flatnonzero(envelope < -0.05) / RATE_HZ
    assert -envelope.min() == pytest.approx(0.12, abs=0.03)
    assert at_s <= reversed_at_s.min() and reversed_at_s.max() <= at_s + 0.5
    assert np.ptp(reversed_at_s) > 0.1
    assert envelope.max() < 2.25


def test_another_transmitter_cuts_off_instead_of_reversing(turn: Complex) -> None:
    envelope = heard(turn, BIRCH, 178.25, 182.25).envelope
    at_zero = np.abs(envelope) < 0.03
    assert envelope.min() > -0.04
    assert 0.01 * RATE_HZ < at_zero.sum() < 0.2 * RATE_HZ
    at_zero_s = 178.3 + np.flatnonzero(at_zero) / RATE_HZ
    assert at_zero_s.min() >= 180 and at_zero_s.max() <= 180.5


@pytest.mark.parametrize(("carrier_hz", "at_s"), [(CEDAR, 40), (BIRCH, 120), (ALDER, 200)])
def test_a_carrier_is_gone_for_three_seconds_and_no_longer(
    turn: Complex, carrier_hz: float, at_s: float
) -> None:
    before = np.abs(np.mean(tuned(turn, carrier_hz, at_s - 0.1, at_s)))
    steps = np.abs(tuned(turn, carrier_hz, at_s - 1, at_s + 4).reshape(-1, 2_400).mean(axis=1)) / before
    off = np.flatnonzero(steps < 0.1)
    assert (off[0], off[-1], len(off)) == (20, 79, 60)
    assert steps[off[1:-1]].max() < 1e-3


@pytest.mark.parametrize(("carrier_hz", "at_s"), [(BIRCH, 30), (ALDER, 110), (CEDAR, 190)])
def test_programme_is_silent_for_45_seconds_under_a_standing_carrier(
    turn: Complex, carrier_hz: float, at_s: float
) -> None:
    for start_s in (at_s + 0.1, at_s + 20.1, at_s + 40.8):
        silent = heard(turn, carrier_hz, start_s, start_s + 4)
        assert np.std(silent.envelope) < 0.01
        assert silent.amplitude > 0.02
    assert np.std(heard(turn, carrier_hz, at_s + 45.5, at_s + 49.5).envelope) > 0.05


def test_it_keeps_real_time_and_never_waits_longer_than_asked() -> None:
    source = station("real-time")
    began = time.monotonic()
    assert source.read(0.0) is None
    assert time.monotonic() - began < 0.04
    assert source.read(0.01) is None
    for number in range(1, 5):
        assert source.read(1.0) is not None
        assert time.monotonic() - began > 0.05 * number - 0.01


def test_a_late_reader_gets_all_that_is_due_without_loss_and_no_more() -> None:
    source = station("real-time")
    opened = time.monotonic()
    time.sleep(0.22)  # being late is what is tried here
    got = list(iter(lambda: source.read(0.0), None))
    assert len(got) * 0.05 <= time.monotonic() - opened + 0.01
    assert [block.start for block in got[:4]] == [0, 2_400, 4_800, 7_200]


def test_reading_before_open_or_after_close_says_so_in_one_line() -> None:
    source = SimulatedSource(Source(kind="simulated"), built_in_channels())
    with pytest.raises(SourceLost, match="not open") as caught:
        source.read(0)
    assert "\n" not in str(caught.value)
    source.open()
    source.close()
    with pytest.raises(SourceLost, match="not open"):
        source.read(0)


@pytest.mark.parametrize("rate_hz", [12_001.1323, 250_000.0])
def test_with_channels_of_ones_own_a_transmitter_is_on_each_at_any_rate(rate_hz: float) -> None:
    settings = Source(kind="simulated", sample_rate_hz=rate_hz, center_hz=1e6, pace="flat-out")
    carriers = (997_000.0, 1_002_500.0)
    channels = [Channel(name=f"mw-{hz / 1e3:g}", carrier_hz=hz, bandwidth_hz=2_000.0) for hz in carriers]
    source = SimulatedSource(settings, channels)
    source.open()
    samples = received(source, 80)
    power = np.abs(np.fft.fft(samples * np.hanning(len(samples)))) ** 2
    frequency = 1e6 + np.fft.fftfreq(len(samples), 1 / rate_hz)
    for carrier in carriers:
        near = np.abs(frequency - carrier) < 500
        assert abs(frequency[near][np.argmax(power[near])] - carrier) < 5
    beyond = (frequency > 1_004_600) & (frequency < 1_005_500)
    inside = np.abs(frequency - carriers[1]) < 2_000
    assert np.mean(power[inside]) > 1e3 * np.mean(power[beyond])


def test_two_channels_on_one_carrier_hear_one_transmitter() -> None:
    settings = Source(kind="simulated", pace="flat-out")
    one = Channel(name="one", carrier_hz=3_000.0)
    samples = []
    for channels in ([one], [one, Channel(name="two", carrier_hz=3_000.0)]):
        source = SimulatedSource(settings, channels)
        source.open()
        samples.append(received(source, 2))
    assert np.array_equal(samples[0], samples[1])


def test_120_transmitters_share_a_wide_stream_without_overloading_it() -> None:
    carriers = 531_000 + 9_000.0 * np.arange(120)
    channels = [
        Channel(name=f"mw-{hz / 1e3:g}", carrier_hz=float(hz), bandwidth_hz=4_400.0) for hz in carriers
    ]
    settings = Source(kind="simulated", sample_rate_hz=2.4e6, center_hz=1_066_500.0, pace="flat-out")
    source = SimulatedSource(settings, channels)
    source.open()
    samples = received(source, 2)
    assert np.abs(samples).max() < 1
    lines = np.abs(np.fft.fft(samples * np.hanning(len(samples)))) / len(samples)
    nearest = np.round((carriers - 1_066_500) * 0.1).astype(int)
    levels = np.max([lines[nearest + offset] for offset in (-1, 0, 1)], axis=0)
    on_air = scenario.carrier_gain(scenario.story_start_s(120)) > 0
    assert on_air.sum() > 115
    assert levels[on_air].min() > 30 * np.median(lines[: len(lines) // 4 * 3][-50_000:])


def test_the_station_takes_a_small_part_of_a_core() -> None:
    source = station()
    source.read(0)
    began = time.process_time()
    received(source, 100)
    taken_s = time.process_time() - began
    assert taken_s < 0.05 * (100 * 0.05)  # measured: 0.8 % of a core; the rest is room for a busy machine


def test_a_loop_of_programme_and_its_overdriven_passage_close_without_a_step() -> None:
    for kind in range(3):
        loop = make_loop(kind, 4_500)
        audio, hot = loop.table[:LOOP_FRAMES], loop.table[LOOP_FRAMES:]
        largest = np.abs(np.diff(audio)).max()
        assert abs(audio[0] - audio[-1]) <= largest
        ends = (loop.passage + np.array((0, PASSAGE_FRAMES - 1))) % LOOP_FRAMES
        assert hot[[0, -1]] == pytest.approx(audio[ends], abs=1e-4)
        assert -hot.min() == pytest.approx(1.12, abs=0.02)
        assert -audio.min() == pytest.approx(0.92, abs=1e-3)


def test_no_heavy_module_is_imported_with_it() -> None:
    code = (
        "import sys, monitord.acquire.simulated; "
        "print({'scipy.signal', 'sounddevice', 'soundfile'} & set(sys.modules) or 'none')"
    )
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60)
    assert run.stdout.strip() == "none"
