"""The quasi-peak reading that `monitord replay --quasi-peak` adds, and that it is added nowhere else."""

import json
import subprocess
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import soundfile

from monitord.chain import Chain
from monitord.measure import METERS
from monitord.measure.quasipeak import QuasiPeakMeter
from monitord.measure.weighting import bs468_weighting, quasi_peak
from monitord.stream import Stream
from tests import signals
from tests.contracts import test_contracts as contracts
from tests.contracts.streams import blocks
from tests.runs import Kept, channel

RATE_HZ = 16_000.0


def hear(modulation: np.ndarray, c_n0_dbhz: float) -> Kept:
    kept = Kept()
    wave = signals.am(
        RATE_HZ, len(modulation) / RATE_HZ, carrier_hz=1_000.0, modulation=modulation, c_n0_dbhz=c_n0_dbhz
    )
    stream = Stream(RATE_HZ, 0.0, False, True)
    chain = Chain(
        [channel(carrier_hz=1_000.0)], stream, [], [kept], kept.tally, more_meters=(QuasiPeakMeter,)
    )
    for block in blocks(wave, 4096):
        chain.process(block)
    chain.finish()
    assert not any(kept.tally.stage_failures.values())
    return kept


@pytest.mark.parametrize(("hz", "bs468_db"), [(1000.0, 0.0), (4000.0, 10.5), (200.0, -13.8)])
def test_a_weak_line_reads_its_weighted_rms(hz: float, bs468_db: float) -> None:
    """BS.468-4: a steady sine reads its rms; table 1 (CHECKS C1), which rounds to 0.1 dB.

    The charge falls by 0.9 % between the tops of 200 Hz: 0.1 dB more.
    """
    t = signals.times(RATE_HZ, round(4.2 * RATE_HZ))
    kept = hear(signals.tone(0.01, hz, t), 140.0)
    assert kept.last("audio_quasi_peak_noise_db") == pytest.approx(bs468_db - 40, abs=0.2)


def test_noise_reads_what_the_detector_shows_of_the_same_noise_alone() -> None:
    """White noise, -45 dB in 5 kHz, C/N0 100 dB-Hz: the truth from the noise itself, weighted and detected for 20 s."""
    rng, frames = np.random.default_rng(6), round(12 * RATE_HZ)
    noise = rng.standard_normal(frames) * np.sqrt(0.5 * 10**-4.5 * (RATE_HZ / 2) / 5000)
    hz = np.fft.rfftfreq(frames, 1 / RATE_HZ)
    weighted = np.fft.rfft(noise) * bs468_weighting(hz) * (hz <= 5000)
    dense = 3 * np.fft.irfft(weighted, 3 * frames)
    truth = quasi_peak(dense[None], 3 * RATE_HZ)[0, 3 * round(RATE_HZ) :]
    expected = 10 * np.log10(np.mean(np.square(truth)) / 0.5)
    # The pointer moves with the noise; ten readings of it, a second apart, are their mean within their own scatter.
    scatter = np.std(np.square(truth)) / np.mean(np.square(truth)) / np.sqrt(9)
    within = 10 * np.log10(1 + 3 * scatter) + 0.1
    kept = hear(noise, 100.0)
    assert kept.last("audio_quasi_peak_noise_db") == pytest.approx(expected, abs=within)
    # Noise reads more by its peaks than by its rms, by 4 to 5 dB; common practice.
    rms_db = kept.readings[-1].values["audio_weighted_noise_db"][0, 1]
    assert 3.5 < kept.last("audio_quasi_peak_noise_db") - rms_db < 5.5


def test_reception_noise_alone_reads_nothing() -> None:
    kept = hear(np.zeros(round(6 * RATE_HZ)), 85.0)
    assert np.isnan(kept.of("audio_quasi_peak_noise_db")).all()


def test_a_line_is_read_within_what_the_docstring_says_of_reception_noise() -> None:
    """Reception noise of 10 log10(2 x 5000) - 100 = -60 dB, weighted -52 (CHECKS C3), reads 4 to 5 dB more."""
    t = signals.times(RATE_HZ, round(8.2 * RATE_HZ))
    kept = hear(signals.tone(0.01, 1000.0, t), 100.0)
    assert -40.1 < kept.last("audio_quasi_peak_noise_db") < -40 + 1.3
    kept = hear(signals.tone(0.004, 1000.0, t), 100.0)  # -48 dB
    assert np.isnan(kept.of("audio_quasi_peak_noise_db")).all()


def test_the_contracts_of_a_meter_hold_for_it_too() -> None:
    contracts.test_a_meter_treats_one_channel_as_it_does_among_many(QuasiPeakMeter)
    contracts.test_a_meter_that_was_reset_is_as_new(QuasiPeakMeter)


def test_only_a_replay_that_asks_for_it_has_it(
    tmp_path: Path, run_monitord: Callable[..., subprocess.CompletedProcess[str]]
) -> None:
    assert QuasiPeakMeter not in METERS
    t = signals.times(RATE_HZ, round(4.2 * RATE_HZ))
    wave = signals.am(
        RATE_HZ, 4.2, carrier_hz=1_000.0, modulation=signals.tone(0.01, 1000.0, t), c_n0_dbhz=130.0
    )
    path = tmp_path / "pause.wav"
    soundfile.write(path, np.stack([wave.real, wave.imag], axis=1), round(RATE_HZ), subtype="FLOAT")
    for more, there in ((("--quasi-peak",), True), ((), False)):
        done = run_monitord("replay", str(path), "--format", "json", *more)
        assert done.returncode == 0, done.stderr
        readings = [json.loads(line) for line in done.stdout.splitlines() if '"channel"' in line]
        last = [line for line in readings if "carrier_level_dbfs" in line][-1]
        assert ("audio_quasi_peak_noise_db" in last) is there
        if there:
            assert last["audio_quasi_peak_noise_db"] == pytest.approx(-40, abs=0.3)
