"""Audio bandwidth: of tones, of programme held to a known bandwidth, and what noise must not make of it."""

import numpy as np
import pytest

from tests import signals
from tests.runs import Kept, channel, run

RATE_HZ = 14_000.0


def heard(
    modulation: signals.Modulation, c_n0_dbhz: float = 90.0, seconds: float = 5.05, seed: int = 1
) -> Kept:
    wave = signals.am(RATE_HZ, seconds, carrier_hz=2.2, modulation=modulation, c_n0_dbhz=c_n0_dbhz, seed=seed)
    return run(wave, RATE_HZ, [channel(carrier_hz=0.0)])


@pytest.mark.parametrize("c_n0_dbhz", [70, 100])
@pytest.mark.parametrize("frequency_hz", [51.0, 400.4, 1000.0, 3333.3, 4970.0])
def test_a_tone_reads_its_own_frequency(frequency_hz: float, c_n0_dbhz: float) -> None:
    """Cells are 8 Hz apart, and a Hann line is 40 dB down 3.5 Hz beside it."""
    kept = heard(lambda t: signals.tone(0.5, frequency_hz, t), c_n0_dbhz)
    assert kept.last("audio_bandwidth_hertz") == pytest.approx(frequency_hz, abs=12)


@pytest.mark.parametrize("c_n0_dbhz", [75, 85, 100])
@pytest.mark.parametrize("band_hz", [1_200.0, 2_500.0, 4_000.0])
def test_programme_reads_the_bandwidth_it_is_held_to(band_hz: float, c_n0_dbhz: float) -> None:
    """Its spectrum falls by 20 dB a decade from 500 Hz on (18 dB at 4 kHz), cut exactly at the band's end."""
    programme = signals.programme_like(RATE_HZ, 8.05, band_hz=band_hz)
    kept = heard(programme.modulation, c_n0_dbhz, seconds=8.05)
    assert kept.last("audio_bandwidth_hertz") == pytest.approx(band_hz, abs=24)


def test_in_more_noise_the_bandwidth_reads_narrower_never_wider() -> None:
    """At 65 dB-Hz treble of 4 kHz is at the noise; at 55 more of it is below."""
    programme = signals.programme_like(RATE_HZ, 8.05, band_hz=4_000.0)
    for c_n0_dbhz in (70, 65, 60, 55):
        kept = heard(programme.modulation, c_n0_dbhz, seconds=8.05)
        assert 500 < kept.last("audio_bandwidth_hertz") < 4_012


@pytest.mark.parametrize("name", ["speech.wav", "music.flac", "dense.ogg"])
@pytest.mark.parametrize("band_hz", [2_500.0, 4_000.0])
def test_recorded_programme_reads_where_its_own_spectrum_falls_by_40_db(name: str, band_hz: float) -> None:
    """Truth from the modulation alone: power in bands of 24 Hz, each second under a Hann window, its largest."""
    seconds = 8.0
    programme = signals.recorded_programme(name, RATE_HZ, seconds, band_hz=band_hz)
    parts = programme.modulation[round(RATE_HZ) :].reshape(7, -1)
    power = np.abs(np.fft.rfft(parts * np.hanning(parts.shape[1]), axis=1)) ** 2
    power[:, :20] = 0
    bands = np.apply_along_axis(np.convolve, 1, power, np.ones(24) / 24, "valid").max(axis=0)
    above = np.flatnonzero(bands > 1e-4 * bands.max())
    kept = heard(programme.modulation, 110, seconds)
    assert kept.last("audio_bandwidth_hertz") == pytest.approx(above[-1], abs=40)
    assert kept.last("audio_bandwidth_hertz") < band_hz + 12


@pytest.mark.parametrize("c_n0_dbhz", [50, 70, 90])
def test_noise_alone_is_no_audio(c_n0_dbhz: float) -> None:
    assert np.isnan(heard(0.0, c_n0_dbhz, seconds=20.05).of("audio_bandwidth_hertz")).all()


def test_the_widest_of_a_minute_is_held_and_gone_after_it() -> None:
    """2.5 kHz for the first 8 s, then 1 kHz until 70 s, then nothing: held in blocks of 5 s."""

    def modulation(t: signals.Array) -> signals.Array:
        wide = signals.tone(0.3, 2500.0, t) * (t < 8)
        return wide + signals.tone(0.3, 1000.0, t) * (t < 70)

    read = heard(modulation, seconds=135.05).of("audio_bandwidth_hertz")
    assert read[2:60] == pytest.approx(2500, abs=12)
    assert read[68:125] == pytest.approx(1000, abs=12)
    assert np.isnan(read[132:]).all()
