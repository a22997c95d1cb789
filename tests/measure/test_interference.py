"""Other carriers in the channel: z = 1 + m + a exp(j 2 pi f t), closed form."""

import numpy as np
import pytest

from monitord.measure.interference import InterferenceMeter
from tests import signals
from tests.trials import bank_of, measured, programmes, received, times, tones

METERS = (InterferenceMeter,)


def read(
    envelope: np.ndarray, c_n0_dbhz: float = 85.0, seed: int = 4, detector: str = "synchronous"
) -> tuple[np.ndarray, np.ndarray]:
    bank = bank_of(len(envelope))
    wave = received(bank, envelope - 1, np.full(len(envelope), 2.0), c_n0_dbhz, np.random.default_rng(seed))
    last = measured(bank, wave, METERS, detector)[-1]
    return last["interferer_offset_hertz"], last["interferer_level_db"]


def line(level_db: float, offset_hz: float, hops: int, rows: int = 1) -> np.ndarray:
    rng = np.random.default_rng(int(abs(offset_hz)) + 7)
    turns = offset_hz * times(bank_of(1), hops) + rng.uniform(0, 1, (rows, 1))
    return np.asarray(10 ** (level_db / 20) * np.exp(2j * np.pi * turns))


@pytest.mark.parametrize("under", ["bare", "tone", "programme"])
@pytest.mark.parametrize("level_db", [-20.0, -50.0])
@pytest.mark.parametrize("offset_hz", [-50.3, 300.25, -1000.4, 4500.0])
def test_a_carrier_in_the_channel_is_found_on_its_side(offset_hz: float, level_db: float, under: str) -> None:
    """Offset within 0.1 Hz; level within 1 dB at -50 dB (bins of noise 25 dB below it), 0.2 dB at -20 dB."""
    hops, rows = (630 if under == "programme" and level_db < -40 else 130), 12
    bank, rng = bank_of(rows), np.random.default_rng(9)
    m = {
        "bare": lambda: np.zeros((rows, len(times(bank, hops)))),
        "tone": lambda: tones(bank, hops, 0.8, rng),
        "programme": lambda: programmes(bank, hops, 0.8, rng)[0],
    }[under]()
    offsets, levels = read(1 + m + line(level_db, offset_hz, hops, rows))
    hard = (
        under == "programme" and level_db < -40
    )  # the programme's own correlation is as strong as the line's
    assert np.mean(offsets[:, 0] * offset_hz > 0) >= (0.7 if hard else 0.95)
    good = np.abs(np.abs(offsets[:, 0]) - np.abs(offset_hz)) < 0.1
    good &= np.abs(levels[:, 0] - level_db) < (1.0 if level_db < -40 else 0.2)
    assert good.mean() >= (0.8 if hard else 0.9)
    assert np.isnan(offsets[good][:, 1:]).all()


@pytest.mark.parametrize("level_db", [-20.0, -40.0])
@pytest.mark.parametrize("offset_hz", [1.3, -2.1, 5.3, -17.0])
def test_a_co_channel_carrier_is_found_within_a_minute(offset_hz: float, level_db: float) -> None:
    """Within 20 Hz, under a tone; what the loop follows is put back to within 1 dB."""
    hops = 720
    m = signals.tone(0.5, 1000.0, times(bank_of(1), hops))
    offsets, levels = read(1 + m + line(level_db, offset_hz, hops))
    assert offsets[0, 0] == pytest.approx(offset_hz, abs=0.1)
    assert levels[0, 0] == pytest.approx(level_db, abs=1.0)


def test_three_are_ranked() -> None:
    hops = 130
    envelope = (
        1 + line(-40, 700, hops) + line(-30, -1500, hops) + line(-46, 3100, hops) + line(-55, 2000, hops)
    )
    offsets, levels = read(envelope)
    np.testing.assert_allclose(offsets[0], [-1500, 700, 3100], atol=0.1)
    np.testing.assert_allclose(levels[0], [-30, -40, -46], atol=0.6)


@pytest.mark.parametrize("c_n0_dbhz", [60.0, 80.0, 110.0])
def test_noise_tones_and_programme_are_no_interferers(c_n0_dbhz: float) -> None:
    """Nor is a test tone's own phase modulation."""
    hops, rows = 230, 30
    bank, rng = bank_of(rows), np.random.default_rng(11)
    for m in (
        np.zeros((rows, len(times(bank, hops)))),
        tones(bank, hops, 0.95, rng),
        programmes(bank, hops, 0.9, rng)[0],
    ):
        for k in (0.0, 0.02):
            offsets, _ = read((1 + m) * np.exp(1j * k * m), c_n0_dbhz)
            assert not np.isfinite(offsets).any()


def test_a_strong_one_is_a_fault() -> None:
    bank, hops = bank_of(2), 130
    envelope = 1 + np.concatenate([line(-20, 900, hops), line(-35, 900, hops)])
    wave = received(bank, envelope - 1, np.zeros(2), 85.0, np.random.default_rng(1))
    meter = InterferenceMeter()
    faults = []

    class Spy(InterferenceMeter):
        def process(self, detected):
            found = super().process(detected)
            faults.append(found["faults"])
            return found

    assert meter.quantities
    measured(bank, wave, (Spy,))
    np.testing.assert_array_equal(np.array(faults[-1]) > 0, [True, False])
