"""Bandwidth and mask of the emission against RR 1.153, ITU-R SM.443-4 and 47 CFR 73.44 (CHECKS A4-A10, B1-B5)."""

import numpy as np
import pytest

from monitord.measure.mask import EmissionMaskMeter, beyond_75_khz_db, cfr_segments
from monitord.measure.occupied import OccupiedBandwidthMeter
from monitord.settings.models import Spectrum
from tests import signals
from tests.runs import channel, run
from tests.test_settings import channel_with, only_problem
from tests.trials import bank_of, measured, received, times

HOPS = 40


def bandwidths(m: np.ndarray, c_n0_dbhz: float = 110.0) -> tuple[float, float]:
    bank = bank_of(1, spectrum=Spectrum())
    wave = received(bank, m[None], np.full(1, 1.0), c_n0_dbhz, np.random.default_rng(3))
    last = measured(bank, wave, (OccupiedBandwidthMeter,))[-1]
    return float(last["occupied_bandwidth_hertz"][0]), float(last["bandwidth_26db_hertz"][0])


def tone(depth: float, hz: float) -> np.ndarray:
    return signals.tone(depth, hz, times(bank_of(1), HOPS))


@pytest.mark.parametrize("c_n0_dbhz", [80.0, 110.0])
@pytest.mark.parametrize("tone_hz", [400.0, 1000.0, 4000.0])
@pytest.mark.parametrize("depth", [0.15, 0.5, 1.0])
def test_b3_a_tone_above_14_percent_occupies_twice_its_frequency(
    depth: float, tone_hz: float, c_n0_dbhz: float
) -> None:
    """One sideband's share (m^2/4)/(1+m^2/2) exceeds 0.5 % from m = 0.142134 on (CHECKS B3). A bin is 1 Hz."""
    assert bandwidths(tone(depth, tone_hz), c_n0_dbhz)[0] == pytest.approx(2 * tone_hz, abs=4)


@pytest.mark.parametrize("depth", [0.0, 0.05, 0.135])
def test_b3_below_14_percent_it_is_the_carriers_line_alone(depth: float) -> None:
    assert bandwidths(tone(depth, 1000.0))[0] < 4


@pytest.mark.parametrize(("depth", "wide"), [(0.09, False), (0.11, True), (0.5, True)])
def test_b4_26_db_bandwidth_of_a_tone(depth: float, wide: bool) -> None:
    """20 log10(m/2) = -26 dB at m = 0.100237 (CHECKS B4); the tone lies on a bin, where Hann reads its height."""
    bank = bank_of(1)
    bin_hz = 1 / (10 * bank.hop_s)
    tone_hz = round(1000 / bin_hz) * bin_hz
    found = bandwidths(tone(depth, tone_hz))[1]
    assert found == pytest.approx(2 * tone_hz, abs=6) if wide else found < 6


def test_b5_programme_up_to_m_occupies_less_than_2m_and_most_of_it_where_it_is_flat() -> None:
    """Necessary bandwidth 2 M (CHECKS B5); flat noise from 0 to M holds 99 % of both sidebands in nearly that."""
    rng = np.random.default_rng(4)
    frames = len(times(bank_of(1), HOPS))
    flat = signals.low_passed(rng.standard_normal(frames), bank_of(1).rate_hz, 4000.0, frames)
    found = bandwidths(0.3 * flat / flat.std())[0]
    assert 0.85 * 8000 < found <= 8000 + 4


@pytest.mark.parametrize(
    ("power_w", "db"),
    [(100, 65.0), (157.9, 65.0), (158.49, 65.0), (1000, 73.0), (5000, 79.99), (5012, 80.0), (50_000, 80.0)],
)
def test_a9_limit_beyond_75_khz(power_w: float, db: float) -> None:
    assert beyond_75_khz_db(power_w) == pytest.approx(db, abs=0.005)


@pytest.mark.parametrize(
    ("hz", "db"),
    [(10_200, 25), (15_000, 25), (25_000, 35), (30_000, 35), (45_000, 50), (60_000, 65), (70_000, 65)],
)
def test_a5_to_a8_limits_of_the_mask(hz: float, db: float) -> None:
    """CHECKS A5 to A8; nothing is said within 10.2 kHz (A10)."""
    segment = next(one for one in reversed(cfr_segments(5000)) if one.first_hz <= hz <= one.last_hz)
    share = (hz - segment.first_hz) / (segment.last_hz - segment.first_hz)
    assert segment.first_db + share * (segment.last_db - segment.first_db) == db
    assert min(one.first_hz for one in cfr_segments(5000)) == 10_200


@pytest.mark.parametrize(("line_db", "offset_hz"), [(-40.0, 13_000.0), (-20.0, -15_000.0)])
def test_a_line_beside_the_emission_reads_its_distance_from_the_limit(
    line_db: float, offset_hz: float
) -> None:
    """A line of -40 dB re the carrier at 13 kHz, where the limit is -25 dB: 15 dB inside; scalloping below 0.4 dB."""
    rate_hz = 96_000.0
    t = np.arange(round(5 * rate_hz)) / rate_hz
    wave = 0.1 * (
        1 + signals.tone(0.8, 1000.0, t) + 10 ** (line_db / 20) * np.exp(2j * np.pi * offset_hz * t)
    )
    one = channel(
        carrier_hz=0.0,
        bandwidth_hz=25_000,
        acquire_hz=50,
        spectrum=Spectrum(mask="47-cfr-73.44", power_w=1000),
    )
    kept = run(wave.astype(np.complex64), rate_hz, [one], block=48_000)
    assert kept.tally.stage_failures[EmissionMaskMeter.__name__] == 0
    first, second, third, *rest = kept.readings[-1].values["emission_mask_margin_db"][0]
    assert first == pytest.approx(-25 - line_db, abs=0.5)
    assert second > 30
    assert np.isnan([third, *rest]).all()  # beyond the channel


def test_noise_beside_the_emission_reads_its_power_in_300_hz_and_its_peaks() -> None:
    """Noise of -50 dB in 300 Hz re the carrier: 300 frames a second of which the highest is held are exponential; of N
    independent ones the expected highest is ln N + 0.58 times the mean: 9.5 dB at N = 5 s x 600 x 50 bins.
    """
    rate_hz = 96_000.0
    frames = round(5 * rate_hz)
    rng = np.random.default_rng(2)
    spectrum = np.fft.fft(rng.standard_normal((frames, 2)).view(complex)[:, 0])
    hz = np.fft.fftfreq(frames, 1 / rate_hz)
    spectrum[(np.abs(hz) < 12_000) | (np.abs(hz) > 14_000)] = 0
    noise = np.fft.ifft(spectrum)
    density = np.mean(np.abs(noise) ** 2) / 4000  # on both sides, 2 kHz each
    noise *= 0.1 * np.sqrt(1e-5 / 300 / density)
    one = channel(
        carrier_hz=0.0,
        bandwidth_hz=25_000,
        acquire_hz=50,
        spectrum=Spectrum(mask=((12_000.0, 25.0), (14_000.0, 25.0))),
    )
    kept = run((0.1 + noise).astype(np.complex64), rate_hz, [one], block=48_000)
    highest_db = 10 * np.log10(np.log(5 * 600 * 14) + 0.577)  # 2 x 2 kHz / 300 Hz independent bins
    margin = kept.readings[-1].values["emission_mask_margin_db"][0, 0]
    assert margin == pytest.approx(-25 + 50 - highest_db, abs=1.5)


def test_without_the_section_nothing_is_measured() -> None:
    bank = bank_of(1)
    wave = received(bank, tone(0.5, 1000.0)[None], np.zeros(1), 90.0, np.random.default_rng(3))
    last = measured(bank, wave, (OccupiedBandwidthMeter, EmissionMaskMeter))[-1]
    assert np.isnan(last["occupied_bandwidth_hertz"][0])
    assert last["emission_mask_margin_db"].shape == (1, 0)


@pytest.mark.parametrize(
    "mask", ['"fcc"', "[[1000, 5]]", "[[2000, 5], [1000, 5]]", "[[1000, true], [2000, 3]]"]
)
def test_a_wrong_mask_is_told(mask: str) -> None:
    line = only_problem(channel_with(f"spectrum = {{mask = {mask}}}"))
    assert line.startswith("channel[0].spectrum.mask = ")
    assert 'must be "47-cfr-73.44" or breakpoints [[offset_hz, attenuation_db], ...]' in line
