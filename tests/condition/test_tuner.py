"""The tuner: flat, steep, linear in phase, the same at every rate, for IQ and for a real IF."""

import numpy as np
import pytest

from monitord.blocks import Block
from monitord.condition.grid import Branch, Grid, smooth
from monitord.condition.tuner import Tuner, low_pass
from tests.runs import channel

RATES_HZ = (1_000.0, 12_001.1323, 44_100.0, 48_000.0, 96_000.0, 192_000.0, 250_000.0, 2_400_000.0)


def tuned(
    samples: np.ndarray, rate_hz: float, size: int = 4801, **keys: object
) -> tuple[np.ndarray, float, Tuner]:
    """The baseband from the second hop on, its rate, and the tuner."""
    real = not np.iscomplexobj(samples)
    tuner = Tuner(rate_hz, 0.0, real, [[channel(**keys)]])
    samples = samples.astype(np.float32 if real else np.complex64)
    parts = []
    for start in range(0, len(samples), size):
        block = Block(samples[start : start + size], rate_hz, 0.0, start, None)
        parts += [hop[0].samples[0] for hop in tuner.process(block)]
    return np.concatenate(parts[1:]), tuner.branches[0].rate_hz, tuner


def expected(
    frequency_hz: float, carrier_hz: float, rate_hz: float, out_rate_hz: float, tuner: Tuner, n: int
) -> np.ndarray:
    """A unit tone at `frequency_hz`, seen from the carrier, at the times of the output: zero phase error allowed."""
    t = tuner.grid.hop / rate_hz + np.arange(n) / out_rate_hz
    return np.exp(2j * np.pi * (frequency_hz - carrier_hz) * t)


@pytest.mark.parametrize("rate_hz", RATES_HZ)
def test_the_grid_is_near_a_tenth_of_a_second_and_fast_to_transform(rate_hz: float) -> None:
    grid = Grid.of(rate_hz)
    assert grid.hop_s == pytest.approx(0.1, rel=0.011 if rate_hz > 6_000 else 0.05)
    if rate_hz > 6_000:
        assert smooth(grid.frame)
        branch = Branch.of(grid, rate_hz / 12, 100.0)
        assert smooth(branch.points)
        assert branch.frames * 8 == branch.points * 6


@pytest.mark.parametrize("real", [False, True], ids=["iq", "real-if"])
@pytest.mark.parametrize("rate_hz", [12_001.1323, 44_100.0, 48_000.0, 250_000.0])
def test_a_tone_in_the_pass_band_comes_out_as_it_went_in(rate_hz: float, real: bool) -> None:
    """Amplitude, phase and time: within 0.01 dB to the bandwidth, no phase, no seam between hops or blocks."""
    bandwidth_hz = min(5_000.0, rate_hz / 6)
    carrier_hz = 0.27 * rate_hz + 1.234  # between bins
    t = np.arange(round(0.9 * rate_hz)) / rate_hz
    for away_hz in (0.0, 17.3, -0.5 * bandwidth_hz, bandwidth_hz, -bandwidth_hz):
        wave = np.exp(2j * np.pi * (carrier_hz + away_hz) * t)
        z, out_rate_hz, tuner = tuned(
            wave.real if real else wave,
            rate_hz,
            carrier_hz=carrier_hz,
            bandwidth_hz=bandwidth_hz,
            acquire_hz=50,
        )
        truth = expected(carrier_hz + away_hz, carrier_hz, rate_hz, out_rate_hz, tuner, len(z))
        gain = np.mean(z * np.conj(truth))
        assert 20 * np.log10(abs(gain)) == pytest.approx(0, abs=0.01)
        assert np.angle(gain) == pytest.approx(0, abs=1e-4)
        # What is left over is rounding: single precision, and -100 dB of the mirror of a real IF.
        assert np.sqrt(np.mean(np.abs(z - gain * truth) ** 2)) < 1e-5


def test_the_stop_band_is_100_db_down() -> None:
    rate_hz, carrier_hz = 48_000.0, 9_000.7
    t = np.arange(round(0.5 * rate_hz)) / rate_hz
    branch = Branch.of(Grid.of(rate_hz), 5_000.0, 100.0)
    edge_hz = branch.pass_hz + branch.grid.transition_hz
    for away_hz in (
        edge_hz + 1,
        -edge_hz - 1,
        edge_hz + 37.7,
        7_000.0,
        9_000.0,
        -12_000.0,
        14_000.0,
        -30_000.0,
    ):
        z, *_ = tuned(np.exp(2j * np.pi * (carrier_hz + away_hz) * t), rate_hz, carrier_hz=carrier_hz)
        assert 20 * np.log10(np.sqrt(np.mean(np.abs(z) ** 2))) < -100


def test_the_response_is_flat_and_real_on_every_bin() -> None:
    grid = Grid.of(48_000.0)
    branch = Branch.of(grid, 5_000.0, 100.0)
    response = low_pass(grid, branch.pass_hz + grid.transition_hz / 2)
    frequency_hz = np.abs(np.fft.fftfreq(grid.frame, 1 / 48_000.0))
    in_band = response[frequency_hz <= 5_100]
    assert 20 * np.log10(in_band.max() / in_band.min()) < 0.001
    assert np.abs(response[frequency_hz >= branch.pass_hz + grid.transition_hz]).max() < 10 ** (-105 / 20)


def test_spans_count_lost_samples_and_go_on_at_a_whole_hop() -> None:
    tuner = Tuner(48_000.0, 0.0, False, [[channel()]])
    silence = np.zeros(12_000, np.complex64)
    spans = [hop[0].span for hop in tuner.process(Block(silence, 48_000.0, 0.0, 0, 100.0))]
    assert [(span.start, span.end, span.fresh) for span in spans] == [(0, 4800, True), (4800, 9600, False)]
    assert spans[0].utc == pytest.approx(100.1)
    later = Block(silence, 48_000.0, 0.0, 20_001, 100.0 + 20_001 / 48_000, 8_001, "overrun")
    spans = [hop[0].span for hop in tuner.process(later)]
    assert [(span.index, span.start, span.fresh) for span in spans] == [(5, 24_000, True)]
    assert spans[0].utc == pytest.approx(100.6)
