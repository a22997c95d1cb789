"""What the quadrature part tells of the programme: incidental phase, and signal-to-noise under programme.

Of the quadrature part, what follows the programme is incidental phase; the rest is reception noise as the in-phase part
has it too, where it cannot be seen (`following.py` takes them apart). Complex noise of the density N0 per Hz has N0/2
in each part on both sides of 0 Hz, N0 B within +-B. In units of the carrier of amplitude a, a tone of depth m has m^2/2
and the noise N0 B / a^2: the signal-to-noise ratio is that of the carrier to the noise in 2 B, a^2 / (2 B N0), times
m^2 (CHECKS E5).

Where far more is left than the quietest quarter of the band has, something else lives in quadrature: stereo, digital
sidebands, phase keying. What is there is no reception noise, and readings that rest on it are marked.
"""

from collections.abc import Mapping

import numpy as np

from monitord.blocks import Detected, Fault, Precise
from monitord.measure.following import Following, Split
from monitord.quantities import Quantity
from monitord.stage import Bank

_LEAST_RMS = 0.03  # of the carrier, in quadrature and following nothing
_UNEVEN = 4.0  # times the reception noise: 6 dB
_LEAST_RATIO = 0.1  # of programme to noise: below, its power cannot be told from the noise's own fluctuation


class QuadratureMeter:
    """Takes each second apart; both quantities need the same sums, and so does the fault `quadrature-signal`."""

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "incidental_phase_radians",
            "rad",
            "Rms phase of the carrier that follows the programme, reception noise and other phase excluded.",
            "DESIGN 4; bias of coherent power: Bendat and Piersol",
            trusted_only=True,
        ),
        Quantity(
            "audio_signal_to_noise_db",
            "dB",
            "In-phase programme rms over reception noise in the channel's audio bandwidth.",
            "DESIGN 4; m^2 CNR in 2 W: textbooks (CHECKS E5)",
            trusted_only=True,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._following = Following(bank)
        self._bandwidth_hz = bank.channels[0].bandwidth_hz
        self._channels = len(bank.channels)
        # One sideband alone has its audio in quadrature too.
        self._judged = not bank.channels[0].detector.endswith(("sideband", "suppressed-carrier"))
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        self._signal = np.zeros(self._channels, bool)  # seen in the last second
        self._begin()

    def _begin(self) -> None:
        self._phase = np.zeros(self._channels)
        self._seconds = np.zeros(self._channels)  # in which there was a programme to follow
        self._programme = np.zeros(self._channels)
        self._noise = np.zeros(self._channels)

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        if detected.second is not None and detected.second.usable.any():
            split = self._following.split(detected.second)
            self._add(split)
            noise = split.density * self._bandwidth_hz
            self._signal = (split.rest > _LEAST_RMS**2) & (split.rest > _UNEVEN * noise)
        return {"faults": np.where(self._signal & self._judged, int(Fault.QUADRATURE_SIGNAL), 0)}

    def _add(self, split: Split) -> None:
        known = np.isfinite(split.phase)
        self._phase += np.where(known, split.phase, 0)
        self._seconds += known
        self._programme += np.nan_to_num(split.programme)
        self._noise += np.nan_to_num(split.density) * self._bandwidth_hz

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        followed = self._seconds > 0
        phase = np.where(followed, self._phase / np.maximum(self._seconds, 1), np.nan)
        told = (self._noise > 0) & (self._programme > _LEAST_RATIO * self._noise)
        ratio = np.where(told, self._programme, 1.0) / np.where(told, self._noise, 1.0)
        self._begin()
        return {
            "incidental_phase_radians": np.sqrt(np.maximum(phase, 0)),
            "audio_signal_to_noise_db": np.where(told, 10 * np.log10(ratio), np.nan),
        }
