"""Programme audio for the built-in station: talk, music, and talk over music, out of nothing but a seed.

Each programme is one seamless loop. It is made once by shaping spectra (so that its end meets its beginning)
and then levelled like a transmitter's audio: slow gain, and a look-ahead limiter that leaves no clipped tops.
"""

from collections.abc import Callable

import numpy as np
import scipy.fft

from monitord.blocks import Complex, Precise, Real

LOOP_RATE_HZ = 32_000
LOOP_S = 40
LOOP_FRAMES = LOOP_RATE_HZ * LOOP_S
PASSAGE_S = 0.5
PASSAGE_FRAMES = round(LOOP_RATE_HZ * PASSAGE_S)
TAPS = 4  # of the interpolation between the samples of the loop

NEGATIVE_CEILING = 0.92
POSITIVE_CEILING = 1.0
HOT_NEGATIVE = 1.12
HOT_POSITIVE = 1.2

_MAKE_RATE_HZ = 12_000
_MAKE_FRAMES = _MAKE_RATE_HZ * LOOP_S
_CONTROL_RATE_HZ = 200
_CONTROL_FRAMES = _CONTROL_RATE_HZ * LOOP_S
_SLOT_FRAMES = LOOP_RATE_HZ // 200

_Maker = Callable[[np.random.Generator], Real]


class Loop:
    """One seamless loop of programme, with its loudest half second a second time, driven too hard.

    table: float32 (LOOP_FRAMES + PASSAGE_FRAMES,), 1.0 = 100 % modulation: the loop, then the hot passage,
        which meets the loop at both its ends.
    passage: index in the loop at which the hot passage belongs.
    """

    def __init__(self, audio: Real) -> None:
        self.passage = (int(np.argmin(audio)) - PASSAGE_FRAMES // 2) % LOOP_FRAMES
        around = (self.passage + np.arange(PASSAGE_FRAMES)) % LOOP_FRAMES
        self.table: Real = np.concatenate((audio, _overdriven(audio[around])))


def make_loop(kind: int, band_hz: float) -> Loop:
    """Make one loop of programme of that kind (0, 1, 2, and over again), limited to `band_hz`."""
    makers: tuple[_Maker, ...] = (_talk, _music, _talk_over_music)
    rng = np.random.default_rng(1_000 + kind % len(makers))
    return Loop(_levelled(_band_limited(makers[kind % len(makers)](rng), band_hz)))


def interpolation_weights(fraction: Precise) -> tuple[Real, ...]:
    """Weights (points,) of TAPS neighbours for points `fraction` (0..1) of the way between the middle two.

    Cubic Lagrange interpolation. In a loop of 32 kS/s it errs by -68 dB at 2 kHz and by -40 dB at 4.5 kHz,
    where programme is weak anyhow: both lie below the receiver's noise.
    """
    u = fraction.astype(np.float32)
    before, after, beyond = u + 1, u - 1, u - 2
    outer, inner = u * after, before * beyond
    return (
        outer * beyond * np.float32(-1 / 6),
        after * inner * np.float32(0.5),
        u * inner * np.float32(-0.5),
        outer * before * np.float32(1 / 6),
    )


def _wander(rng: np.random.Generator, low_hz: float, high_hz: float) -> Precise:
    """A slow random movement of rms 1 between two frequencies, at the control rate, seamless."""
    spectrum = np.zeros(_CONTROL_FRAMES // 2 + 1, np.complex128)
    bins = slice(max(1, round(low_hz * LOOP_S)), round(high_hz * LOOP_S))
    count = len(spectrum[bins])
    spectrum[bins] = rng.standard_normal(count) + 1j * rng.standard_normal(count)
    movement = scipy.fft.irfft(spectrum, _CONTROL_FRAMES)
    return np.asarray(movement / np.std(movement))


def _drawn_out(control: Precise) -> Real:
    """A seamless control signal, drawn out to the rate at which programme is made."""
    step = _MAKE_RATE_HZ // _CONTROL_RATE_HZ
    ends = np.roll(control, -1)
    ramp = np.arange(step) / step
    return (control[:, None] + (ends - control)[:, None] * ramp).ravel().astype(np.float32)


def _phrases(rng: np.random.Generator) -> Precise:
    """Gate of a talker: phrases of 1.2 to 4 s, pauses to breathe of 0.35 to 0.8 s; at the control rate."""
    turns = LOOP_S  # more than ever fit
    lengths = np.stack((rng.uniform(1.2, 4.0, turns), rng.uniform(0.35, 0.8, turns)), axis=1)
    changes = np.cumsum(lengths.ravel())
    at_s = np.arange(_CONTROL_FRAMES) / _CONTROL_RATE_HZ
    talking = (np.searchsorted(changes, at_s) % 2 == 0).astype(np.float64)
    taper = np.hanning(17)
    smooth = np.convolve(np.concatenate((talking[-8:], talking, talking[:8])), taper / taper.sum(), "valid")
    return np.maximum(smooth, 3e-4)  # a studio is never quite silent


def _dispersion(frequency_hz: Real) -> Complex:
    """An all-pass that delays high frequencies by up to 4 ms: a voice then peaks alike both ways."""
    delay_s, corner_hz = 0.004, 800.0
    bend = frequency_hz - corner_hz * np.arctan(frequency_hz / corner_hz)
    return np.asarray(np.exp(np.complex64(-2j * np.pi * delay_s) * bend), np.complex64)


def _resonances(frequency_hz: Real, centers_hz: tuple[float, ...]) -> Real:
    """Amplitude response of a mouth: broad resonances on a slope, nothing below 80 Hz."""
    response = np.zeros_like(frequency_hz)
    for rank, center_hz in enumerate(centers_hz):
        width_hz = 60 + 0.06 * center_hz
        response += 0.6**rank / (1 + ((frequency_hz - center_hz) / width_hz) ** 2)
    rumble = (frequency_hz / 80) ** 4
    return (response * rumble / (1 + rumble)).astype(np.float32)


def _talk(rng: np.random.Generator) -> Real:
    """A talker: pitch pulses through two vowels and breath through a hiss, by syllables and phrases."""
    pitch = _drawn_out(118 * np.exp(0.12 * _wander(rng, 0.1, 1.5) + 0.05 * _wander(rng, 2, 5)))
    cycles = np.cumsum(pitch, dtype=np.float64) / _MAKE_RATE_HZ
    cycles *= np.round(cycles[-1]) / cycles[-1]  # whole cycles, so that the loop closes
    turn = (cycles % 1.0).astype(np.float32) * np.float32(2 * np.pi)
    frequency: Real = (np.arange(_MAKE_FRAMES // 2 + 1) / LOOP_S).astype(np.float32)
    pulses = scipy.fft.rfft(np.exp(150 * (np.cos(turn) - 1))) * _dispersion(frequency)
    breath = scipy.fft.rfft(rng.standard_normal(_MAKE_FRAMES, np.float32))
    open_vowel = scipy.fft.irfft(pulses * _resonances(frequency, (620, 1150, 2500, 3500)))
    close_vowel = scipy.fft.irfft(pulses * _resonances(frequency, (310, 2100, 2800, 3600)))
    hiss = scipy.fft.irfft(breath * _resonances(frequency, (3000, 4200)))
    vowel = _drawn_out(0.5 + 0.5 * np.tanh(2 * _wander(rng, 0.5, 4)))
    voicing = 0.5 + 0.5 * np.tanh(3 * (_wander(rng, 1, 5) + 0.7))
    syllables = np.exp(0.9 * _wander(rng, 1.5, 5.5)) * _phrases(rng)
    voice = open_vowel * vowel + close_vowel * (1 - vowel)
    loudness = np.sqrt(np.mean(voice * voice))
    hiss *= 0.25 * loudness / np.sqrt(np.mean(hiss * hiss))
    talk = voice * _drawn_out(voicing * syllables) + hiss * _drawn_out((1.15 - voicing) * syllables)
    return np.asarray(talk / loudness, np.float32)


def _plucked(note_hz: float, frames: int) -> Real:
    """One note of a plucked string: partials that fall off and die away, the high ones sooner."""
    partial = np.arange(1, 1 + min(10, int(5_000 / note_hz)))[:, None]
    turn = np.arange(1024) * (2 * np.pi / 1024)
    at_s = np.arange(frames) / _MAKE_RATE_HZ
    index = (at_s * (note_hz * 1024)).astype(np.intp) & 1023
    bright = (np.sin(partial * turn) / partial).sum(axis=0).astype(np.float32)
    mellow = (np.sin(partial * turn) / partial**2.2).sum(axis=0).astype(np.float32)
    fall = np.exp(-at_s / 0.12).astype(np.float32)
    attack = np.minimum(at_s / 0.004, 1).astype(np.float32)
    rest = (np.exp(-at_s / 0.45) * np.minimum((at_s[-1] - at_s) / 0.02, 1)).astype(np.float32)
    return np.asarray((bright[index] * fall + mellow[index] * rest) * attack)


def _music(rng: np.random.Generator) -> Real:
    """A band of three: a bass, chords and a tune from one scale, with a brushed beat behind them."""
    beats = LOOP_S * 5 // 2
    beat_frames = _MAKE_FRAMES // beats
    frames = 3 * beat_frames
    scale_hz = 110 * 2 ** (np.array((0, 2, 4, 7, 9, 12, 14, 16, 19, 21)) / 12)
    pitches_hz = np.concatenate((scale_hz / 2, scale_hz, scale_hz * 2))
    notes = np.stack([_plucked(float(pitch_hz), frames) for pitch_hz in pitches_hz])
    rows = np.zeros((beats, beat_frames), np.float32)
    for beat in range(beats):
        root = int(rng.integers(0, 4)) if beat % 2 == 0 else 2
        chosen = [root, 10 + root, 12 + root, 20 + int(rng.integers(0, 10))]
        touch = rng.uniform(0.3, 1.0, len(chosen)).astype(np.float32)
        chord = (notes[chosen, :] * touch[:, None]).sum(axis=0)
        rows[(beat + np.arange(3)) % beats] += chord.reshape(3, beat_frames)
    brush = np.exp(-np.arange(beat_frames) / (0.05 * _MAKE_RATE_HZ)).astype(np.float32)
    rows += rng.standard_normal(rows.shape, np.float32) * (0.25 * brush + 0.01)
    return np.asarray(rows.ravel() / np.std(rows), np.float32)


def _talk_over_music(rng: np.random.Generator) -> Real:
    """A presenter over a bed of music."""
    return _talk(rng) + np.float32(0.22) * _music(rng)


def _band_limited(audio: Real, band_hz: float) -> Real:
    """Bring programme to the loop's rate; a gentle fall from 92 % of the band to nothing at its edge."""
    spectrum = scipy.fft.rfft(audio)
    frequency = np.arange(len(spectrum)) / LOOP_S
    edge = np.clip((band_hz - frequency) / (0.08 * band_hz), 0, 1)
    high_pass = np.clip((frequency - 30) / 20, 0, 1)
    spectrum *= (np.sin(edge * (np.pi / 2)) ** 2 * high_pass).astype(np.float32)
    return np.asarray(scipy.fft.irfft(spectrum, LOOP_FRAMES) * np.float32(LOOP_FRAMES / len(audio)))


def _halfway(audio: Real) -> Real:
    """The values halfway between the samples, where the true peak may lie; seamless."""
    wide = np.concatenate((audio[-1:], audio, audio[:2]))
    near, far = wide[1:-2] + wide[2:-1], wide[:-3] + wide[3:]
    return np.asarray((9 * near - far) / 16)


def _slot_peaks(audio: Real, negative: float, positive: float) -> Real:
    """How far the audio reaches towards two ceilings (1 = touches), in slots of 5 ms with both neighbours."""
    between = _halfway(audio)
    high = np.maximum(audio, between).reshape(-1, _SLOT_FRAMES).max(axis=1)
    low = np.minimum(audio, between).reshape(-1, _SLOT_FRAMES).min(axis=1)
    reach = np.maximum(high / positive, low / -negative)
    return np.asarray(np.maximum(reach, np.maximum(np.roll(reach, 1), np.roll(reach, -1))))


def _between_slots(gain: Real) -> Real:
    """Gain of each slot, drawn as straight lines from middle to middle, seamless."""
    middle = _SLOT_FRAMES // 2
    ramp = (np.arange(_SLOT_FRAMES) / _SLOT_FRAMES).astype(np.float32)
    lines = gain[:, None] + (np.roll(gain, -1) - gain)[:, None] * ramp
    return np.asarray(np.roll(lines.ravel(), middle))


def _levelled(audio: Real) -> Real:
    """Drive programme into a limiter that looks ahead: peaks stay below both ceilings, none is clipped.

    A gain that both ends of a line were allowed is allowed all along it; it moves slowly enough to spread the
    spectrum by some 100 Hz only.
    """
    peaks = _slot_peaks(audio, NEGATIVE_CEILING, POSITIVE_CEILING)
    drive = np.float32(1 / np.quantile(peaks, 0.85))
    driven = audio * drive
    driven *= _between_slots(np.minimum(1, 1 / (peaks * drive)))
    lowest = min(float(driven.min()), float(_halfway(driven).min()))
    return np.asarray(driven * np.float32(NEGATIVE_CEILING / -lowest))


def _overdriven(passage: Real) -> Real:
    """The passage, turned up until every syllable reaches 112 % negative; unchanged at its ends."""
    gain = np.minimum(4, 1 / _slot_peaks(passage, HOT_NEGATIVE, HOT_POSITIVE))
    ends = np.minimum(np.arange(len(passage)), np.arange(len(passage))[::-1]) / (0.03 * LOOP_RATE_HZ)
    turned_up = np.sin(np.clip(ends, 0, 1) * (np.pi / 2)) ** 2
    return np.asarray(passage * (1 + turned_up * (_between_slots(gain) - 1)), np.float32)
