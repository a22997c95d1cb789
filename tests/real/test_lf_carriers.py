"""Two LF time-signal carriers off the air, keyed down for 0.1 or 0.2 s each second and phase-keyed meanwhile.

The truth is what the recordings' index says of them: carrier at +0.012 and 0.000 Hz, low over high amplitude 0.152
(the operator publishes "to about 15 %") and 0.129.
"""

import json
import subprocess
from collections.abc import Callable

import numpy as np
import pytest

from monitord.acquire.recording import RecordingSource
from monitord.blocks import Block, Fault
from monitord.condition.tuner import Tuner
from monitord.detect.synchronous import SynchronousDetector
from monitord.settings import Channel, Source
from monitord.stage import Bank
from tests import data
from tests.runs import channel, run

CASES = [("lf-keyed-carrier-2017", 0.012, 0.152), ("lf-keyed-carrier-2020", 0.0, 0.129)]
SETTINGS = '[[channel]]\nname = "lf"\ncarrier_hz = 77_500\nbandwidth_hz = 500\n'


@pytest.mark.parametrize(("name", "offset_hz", "_ratio"), CASES)
def test_replay_finds_the_carrier_on_frequency_and_never_lost(
    name: str,
    offset_hz: float,
    _ratio: float,
    tmp_path,
    run_monitord: Callable[..., subprocess.CompletedProcess[str]],
) -> None:
    settings = tmp_path / "lf.toml"
    settings.write_text(SETTINGS)
    for words in ((), ("--settings", str(settings))):
        done = run_monitord(
            "replay", str(data.path(f"off-air/{name}.sigmf-meta")), "--format", "json", *words
        )
        assert done.returncode == 0, done.stderr
        lines = [json.loads(line) for line in done.stdout.splitlines()]
        offsets = [line.get("carrier_frequency_offset_hertz") for line in lines]
        known = [value for value in offsets if value is not None]
        assert len(known) >= 25
        assert np.median(known) == pytest.approx(offset_hz, abs=0.02)
        assert "carrier-loss" not in lines[-1]["summary"]["events"]


@pytest.mark.parametrize("bandwidth_hz", [2_000.0, 5_000.0])
@pytest.mark.parametrize("name", ["lf-keyed-carrier-2017", "lf-keyed-carrier-2020"])
def test_keying_is_neither_a_lost_carrier_nor_over_modulation(name: str, bandwidth_hz: float) -> None:
    """At the default `loss_after_s`. The phase keying stands in quadrature, and that is the one fault that is told."""
    wave, rate_hz, center_hz = recording(name)
    channels = [channel(carrier_hz=77_500.0, bandwidth_hz=bandwidth_hz)]
    kept = run(wave, rate_hz, channels, center_hz=center_hz)
    keyed = np.uint32(Fault.QUADRATURE_SIGNAL)
    assert all(reading.faults[0] & ~keyed == 0 for reading in kept.readings[1:])
    assert np.mean([reading.faults[0] & keyed > 0 for reading in kept.readings]) > 0.8
    assert {int(moment.present[0]) for moment in kept.moments[10:]} == {1}
    assert kept.kinds() == []


@pytest.mark.parametrize(("name", "_offset_hz", "ratio"), CASES)
def test_the_carrier_is_keyed_down_as_far_as_published(name: str, _offset_hz: float, ratio: float) -> None:
    """Medians of the two plateaus of the detected in-phase amplitude, 20 ms of each edge left out."""
    samples, rate_hz, center_hz = recording(name)
    channels = [Channel(name="lf", carrier_hz=77_500.0, bandwidth_hz=500.0)]
    tuner = Tuner(rate_hz, center_hz, False, [channels])
    branch = tuner.branches[0]
    detector = SynchronousDetector()
    detector.prepare(Bank(tuple(channels), branch.rate_hz, branch.frames, branch.noise_hz, True, {}))
    block = Block(samples, rate_hz, center_hz, 0, None)
    hops = [detector.process(hop[0]) for hop in tuner.process(block)]
    wave = np.concatenate([hop.in_phase[0] * hop.amplitude[0] for hop in hops if hop.settled[0]])
    low, high = plateaus(wave, branch.rate_hz)
    assert low / high == pytest.approx(ratio, abs=0.01)


def recording(name: str) -> tuple[np.ndarray, float, float]:
    """All samples of a recording, their rate and the frequency that 0 Hz of them stands for, Hz."""
    path = data.path(f"off-air/{name}.sigmf-meta")
    source = RecordingSource(Source(kind="recording", path=str(path), pace="flat-out"))
    source.open()
    parts = []
    while not source.ended:
        block = source.read(1.0)
        if block is not None:
            parts.append(block.samples)
    source.close()
    return np.concatenate(parts), source.rate_hz, source.center_hz


def plateaus(wave: np.ndarray, rate_hz: float) -> tuple[float, float]:
    """Medians of the keyed-down and of the full stretches, each without 20 ms at both of its edges."""
    edge = round(0.02 * rate_hz)
    smooth = np.convolve(
        wave, np.ones(edge // 2) / (edge // 2), mode="same"
    )  # 10 ms: an impulse is no keying
    low = smooth < 0.5 * np.median(wave)
    change = np.flatnonzero(np.diff(low.astype(int)))
    near_edge = np.zeros(len(wave), bool)
    for place in change:
        near_edge[max(0, place - edge) : place + edge] = True
    return float(np.median(wave[low & ~near_edge])), float(np.median(wave[~low & ~near_edge]))
