"""The types that travel from stage to stage.

Arrays handed on are read-only by agreement: a stage never writes into what it was given.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from enum import IntFlag
from functools import cache, cached_property

import numpy as np
import scipy.fft
from numpy.typing import NDArray

Complex = NDArray[np.complex64]
Real = NDArray[np.float32]
Precise = NDArray[np.float64]
Flags = NDArray[np.bool_]


class Fault(IntFlag):
    """Why a reading is not to be trusted. The names on the page are `fault_names(...)`."""

    UNLOCKED = 1
    WEAK_SIGNAL = 2
    FADING = 4
    INTERFERENCE = 8
    SOURCE_GAP = 16
    CLIPPING = 32
    SETTLING = 64
    BAND_LIMITED = 128
    QUADRATURE_SIGNAL = 256
    GAIN_CHANGED = 512


FAULT_NAMES: Mapping[Fault, str] = {fault: str(fault.name).lower().replace("_", "-") for fault in Fault}


def fault_names(bits: int) -> tuple[str, ...]:
    """Names of the faults set in `bits`, as they stand on the page and in the replay output."""
    return tuple(name for fault, name in FAULT_NAMES.items() if bits & fault)


LOSS_REASONS = ("overrun", "sequence", "rejected")
"""Why samples are missing: a full queue, a jump in the sender's count, a message that was rejected."""


@dataclass(frozen=True, slots=True)
class Block:
    """Samples as they came.

    samples: complex64 (IQ) or float32 (real IF), shape (frames,); 0 dBFS is an amplitude of 1.0.
    rate_hz: samples per second.
    center_hz: the frequency that 0 Hz of the samples stands for.
    start: index of the first sample since the stream began; lost samples are counted in it.
    utc: UTC of the first sample, seconds since 1970, or None where the recording does not say.
    lost, lost_reason: frames lost just before the block, and which of LOSS_REASONS ("" when none).
    clipped: how many samples stood at full scale.
    stream: number of the stream; another number means that counting began anew (a reconnect).
    """

    samples: Complex | Real
    rate_hz: float
    center_hz: float
    start: int
    utc: float | None
    lost: int = 0
    lost_reason: str = ""
    clipped: int = 0
    stream: int = 0

    @property
    def end(self) -> int:
        """Index of the sample after the last."""
        return self.start + len(self.samples)


@dataclass(frozen=True, slots=True)
class Span:
    """The stretch of the source that one hop stands for.

    index: number of the hop on the grid that began with the stream (lost hops are counted).
    start, end: samples [start, end) of the source.
    rate_hz: of the source.
    utc: UTC of `end`, seconds since 1970, or None.
    fresh: the first hop after the beginning or after a gap.
    clipped: samples of the source at full scale among those that came with this hop.
    stream: number of the stream, as in Block.
    """

    index: int
    start: int
    end: int
    rate_hz: float
    utc: float | None
    fresh: bool = False
    clipped: int = 0
    stream: int = 0

    @property
    def elapsed_s(self) -> float:
        """Seconds from the beginning of the stream to the end of the hop."""
        return self.end / self.rate_hz


@dataclass(frozen=True, slots=True)
class Baseband:
    """One hop of one bank: complex64 (channels, frames), each nominal carrier at 0 Hz."""

    samples: Complex
    rate_hz: float
    span: Span


_SPOT = 499  # enough to tell two detectors apart by


@cache
def hann(frames: int) -> Real:
    """Periodic Hann window of sum 2, float32 (frames,): a sinusoid of amplitude a has a line of height a."""
    taper = np.hanning(frames + 1)[:-1]
    return np.asarray(taper * (2 / taper.sum()), np.float32)


@dataclass(frozen=True)
class Second:
    """Ten hops of one bank taken together, for what needs a finer resolution than a hop has.

    The arrays are good until the next hop is detected.

    in_phase: what the detector made of it, float32 (channels, frames), re the second's mean carrier: m = in_phase - 1.
    coherent: the baseband turned to the carrier's phase, complex64 (channels, frames), re the same carrier.
    amplitude: that carrier, the Hann-weighted mean over this second, full scale = 1 (channels,).
    noise_density: mean reception noise, power per Hz re full scale (channels,).
    usable: the carrier was held, settled and unbroken all through (channels,); other rows mean nothing.
    noise_gain: as in Detected.
    """

    in_phase: Real
    coherent: Complex
    rate_hz: float
    amplitude: Precise
    noise_density: Precise
    usable: Flags
    noise_gain: float = 1.0

    @property
    def audio_noise_density(self) -> Precise:
        """Reception noise in `in_phase`, as in Detected (channels,)."""
        return self.noise_density * self.noise_gain

    @property
    def bin_hz(self) -> float:
        """Spacing of the spectra's bins."""
        return float(self.rate_hz / self.in_phase.shape[1])

    @cached_property
    def audio(self) -> Complex:
        """Hann-windowed spectrum of m, complex64 (channels, frames // 2 + 1): a sinusoid of amplitude a is a line of a.

        White noise of variance v gives bins of the mean power 6 v / frames (`BIN_POWER` v / frames).
        """
        return np.asarray(scipy.fft.rfft((self.in_phase - 1) * hann(self.in_phase.shape[1]), axis=1))

    @cached_property
    def modulation(self) -> Complex:
        """The same of what is in phase with the carrier: where the detector is the synchronous one, `audio` itself."""
        wave = self.coherent.real
        if np.array_equal(self.in_phase[:, ::_SPOT], wave[:, ::_SPOT], equal_nan=True):
            return self.audio
        return np.asarray(scipy.fft.rfft((wave - 1) * hann(wave.shape[1]), axis=1))

    @cached_property
    def quadrature(self) -> Complex:
        """The same of the quadrature part."""
        return np.asarray(scipy.fft.rfft(self.coherent.imag * hann(self.coherent.shape[1]), axis=1))


BIN_POWER = 6.0
"""Mean power of a bin of `Second.audio` for noise of the variance 1, times the frames: 4 x 1.5 (Harris 1978: ENBW)."""


@dataclass(frozen=True, slots=True)
class Detected:
    """One hop of one bank, detected.

    in_phase: what the detector made of it, float32 (channels, frames), the carrier scaled to 1; NaN rows where there is
        no carrier.
    coherent: the baseband turned to the carrier's phase, complex64 (channels, frames), in the same scale. Its real part
        is what the synchronous detector gives, its magnitude the envelope.
    amplitude: the carrier amplitude that depth refers to (channels,), full scale = 1; NaN where there is no carrier.
    mean_amplitude: the carrier's tapered mean over the averaging time; the same, but for channels whose depth refers to
        the unmodulated carrier (channels,).
    hop_amplitude: amplitude of the carrier in this hop alone (channels,), never NaN.
    recent_amplitude: mean of this and the last hop's: lags less than `amplitude`, but moves with deep bass.
    brief_amplitude: tapered mean of the last half second, where `amplitude` has a whole one (channels,).
    noise_density: reception noise of this hop, power per Hz re full scale (channels,).
    sigma: standard deviation of what disturbs `in_phase` (reception noise, impulses, other carriers), as the
        quadrature shows it, carrier = 1 (channels,).
    phase: carrier phase less that of the nominal carrier, rad, unwrapped while locked, float64
        (channels, steps), at the middle of `steps` equal parts of the hop.
    step_amplitude: magnitude of the mean over each of these steps, near the phase followed or last followed, full
        scale = 1, locked or not: what stands at the carrier, at the time resolution of keying (channels, steps).
    offset_hz: carrier frequency less the nominal one, as the loop holds it (channels,).
    glimpse: amplitude of a line within reach that this hop shows while none is followed safely, else 0 (channels,).
    locked: the carrier loop holds a carrier (channels,).
    settled: locked, and enough has been averaged for the amplitude to be exact (channels,).
    broken: the carrier was interrupted within this hop (channels,).
    fading: selective fading has changed the depth, or may have (channels,).
    noise_gain: power of the reception noise in `in_phase` over that in phase with the carrier.
    delay_s: by how much `in_phase` lags behind the hop's span.
    second: with every tenth hop since the stream began, these ten together; else None.
    """

    in_phase: Real
    coherent: Complex
    rate_hz: float
    span: Span
    amplitude: Precise
    mean_amplitude: Precise
    hop_amplitude: Precise
    recent_amplitude: Precise
    brief_amplitude: Precise
    noise_density: Precise
    sigma: Precise
    phase: Precise
    step_amplitude: Precise
    offset_hz: Precise
    glimpse: Precise
    locked: Flags
    settled: Flags
    broken: Flags
    fading: Flags
    noise_gain: float = 1.0
    delay_s: float = 0.0
    second: Second | None = None

    @property
    def audio_noise_density(self) -> Precise:
        """Reception noise in `in_phase`: its one-sided power per Hz of audio, full scale = 1 (channels,)."""
        return self.noise_density * self.noise_gain

    @property
    def quadrature(self) -> Real:
        """What is in quadrature to the carrier, float32 (channels, frames)."""
        return self.coherent.imag


@dataclass(frozen=True, slots=True)
class Moment:
    """One hop of all channels, for the rules that must tell within 0.3 s. All arrays (channels,).

    level_dbfs: carrier level of this hop; -inf where there is none.
    present: 1 the carrier is there, 0 it is not, -1 not known yet.
    locked, settled: as in Detected.
    positive_peak, negative_peak: true peaks of this hop as ratios; NaN where there is none.
    over_positive_s, over_negative_s: seconds of this hop beyond the limit.
    over_positive_span_s, over_negative_span_s: first and last time beyond it, seconds since the stream began,
        (channels, 2), NaN where there is none.
    cut_off: the negative excursion is a cut-off and no reversal.
    faults: bits of Fault.
    """

    channels: tuple[str, ...]
    span: Span
    level_dbfs: Precise
    present: NDArray[np.int8]
    locked: Flags
    settled: Flags
    positive_peak: Precise
    negative_peak: Precise
    over_positive_s: Precise
    over_negative_s: Precise
    over_positive_span_s: Precise
    over_negative_span_s: Precise
    cut_off: Flags
    faults: NDArray[np.uint32]


@dataclass(frozen=True, slots=True)
class Reading:
    """One interval of whole hops, all quantities of all channels.

    values: quantity name without prefix -> float64 (channels,), or (channels, labels) where the quantity has a
        second label; NaN where there is nothing valid to say.
    valid: no fault stands against the reading (channels,).
    faults: bits of Fault (channels,).
    span: [start, end) in samples, with the UTC of its end.
    """

    channels: tuple[str, ...]
    span: Span
    values: Mapping[str, Precise]
    valid: Flags
    faults: NDArray[np.uint32]


@dataclass(frozen=True, slots=True)
class Event:
    """Something that began and perhaps ended. It is told twice: when it opens, and (`ended_s` set) when it closes.

    id: unique within the process.
    kind: one of the event kinds.
    channel: its channel, or None for the source and the daemon.
    started_s, ended_s: seconds since the stream began.
    started_utc, ended_utc: the same as UTC, seconds since 1970, or None where time is not known.
    extreme: the worst value met, in the unit of `limit`; NaN where there is none.
    detail: more in a word, "reversal" or "cut-off" for instance.
    """

    id: int
    kind: str
    channel: str | None
    started_s: float
    started_utc: float | None
    ended_s: float | None = None
    ended_utc: float | None = None
    extreme: float = float("nan")
    limit: float = float("nan")
    detail: str = ""
