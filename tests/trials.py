"""Many trials at once: each row of a bank is a trial of its own, with its own noise, straight at baseband.

The tuner is left out (its own tests say what it does); the noise is white within its noise bandwidth.
"""

from collections.abc import Mapping, Sequence
from functools import cache

import numpy as np

from monitord.blocks import Baseband, Span
from monitord.condition.grid import Branch, Grid
from monitord.detect import DETECTORS
from monitord.measure import METERS
from monitord.stage import Accuracy, Bank, Meter
from tests import signals
from tests.runs import channel

RATE_HZ = 48_000.0
GRID = Grid.of(RATE_HZ)
AMPLITUDE = 0.1

Readings = list[Mapping[str, np.ndarray]]


def bank_of(rows: int, accuracy: Accuracy | None = None, **keys: object) -> Bank:
    """A bank of `rows` equal channels, as the chain would make it for 48 kS/s."""
    channels = tuple(channel(name=f"trial-{row}", **keys) for row in range(rows))
    branch = Branch.of(GRID, channels[0].bandwidth_hz, channels[0].acquire_hz)
    return Bank(
        channels, branch.rate_hz, branch.frames, branch.noise_hz, True, {}, accuracy=accuracy or Accuracy()
    )


def times(bank: Bank, hops: int) -> np.ndarray:
    """Times of the baseband's samples, seconds (frames,)."""
    return np.arange(hops * bank.frames) / bank.rate_hz


def received(
    bank: Bank, modulation: np.ndarray, offset_hz: np.ndarray, c_n0_dbhz: float, rng: np.random.Generator
) -> np.ndarray:
    """Carriers of `AMPLITUDE` with noise, complex64 (rows, frames).

    modulation: m (rows, frames), or complex: the envelope 1 + m may have a quadrature part. offset_hz: (rows,).
    """
    frames = modulation.shape[1]
    turns = offset_hz[:, None] * np.arange(frames) / bank.rate_hz
    wave = (AMPLITUDE * (1 + modulation) * np.exp(2j * np.pi * turns)).astype(np.complex64)
    inside = np.abs(np.fft.fftfreq(frames, 1 / bank.rate_hz)) < bank.noise_hz
    density = AMPLITUDE**2 / 10 ** (c_n0_dbhz / 10)
    scale = np.sqrt(density * bank.rate_hz * frames / 2)
    for row in wave:
        spectrum = np.zeros(frames, np.complex64)
        parts = rng.standard_normal(2 * int(inside.sum()), dtype=np.float32)
        spectrum[inside] = parts.view(np.complex64) * np.float32(scale)
        row += np.fft.ifft(spectrum)
    return wave


def measured(
    bank: Bank, wave: np.ndarray, meters: Sequence[type[Meter]] = METERS, detector: str = "synchronous"
) -> Readings:
    """Readings of the meters, one for each ten hops of the wave (rows, frames)."""
    detect = DETECTORS[detector]()
    detect.prepare(bank)
    used = [make() for make in meters]
    for meter in used:
        meter.prepare(bank)
    readings: Readings = []
    for index in range(wave.shape[1] // bank.frames):
        part = wave[:, index * bank.frames : (index + 1) * bank.frames]
        span = Span(index, index * GRID.hop, (index + 1) * GRID.hop, RATE_HZ, None, index == 0)
        detected = detect.process(Baseband(part, bank.rate_hz, span))
        for meter in used:
            meter.process(detected)
        if index % 10 == 9:
            readings.append({name: value for meter in used for name, value in meter.reading().items()})
    return readings


def tones(bank: Bank, hops: int, depth: float, rng: np.random.Generator) -> np.ndarray:
    """A tone of random frequency (30 Hz to the bandwidth) and phase in each row, (rows, frames)."""
    rows = len(bank.channels)
    top_hz = 0.98 * bank.channels[0].bandwidth_hz
    frequency_hz = np.exp(rng.uniform(np.log(30), np.log(top_hz), rows))[:, None]
    return np.asarray(
        signals.tone(depth, 1.0, frequency_hz * times(bank, hops), rng.uniform(0, 2 * np.pi, rows)[:, None])
    )


def programmes(
    bank: Bank, hops: int, depth: float, rng: np.random.Generator
) -> tuple[np.ndarray, np.ndarray]:
    """Programme of the true negative peak `depth` in each row (rows, frames), and its positive peaks (rows,)."""
    frames = hops * bank.frames
    made = _programmes(len(bank.channels), bank.rate_hz, bank.channels[0].bandwidth_hz)
    turned = [np.roll(one.modulation, int(rng.integers(len(one.modulation)))) for one in made]
    return (
        depth * np.stack([np.resize(one, frames) for one in turned]),
        depth * np.array([one.positive_peak for one in made]),
    )


@cache
def _programmes(count: int, rate_hz: float, band_hz: float) -> list[signals.Programme]:
    """Of 8 s and true negative peak 1: every one of its peaks stands once or twice in a window of 10 s."""
    return [
        signals.programme_like(rate_hz, 8.0, band_hz=band_hz, negative_peak=1.0, seed=seed)
        for seed in range(count)
    ]
