"""Selective fading: on the way to the receiver the carrier and its sidebands have fared differently.

Over two paths the channel is H0 + H1 f near the carrier. What H1 / H0 has in phase turns programme into quadrature, in
proportion; what it has in quadrature changes the depth. Both come and go together, within seconds, while the carrier's
level moves; a transmitter's incidental phase modulation stands still. So a hop is not to be trusted whose quadrature is
strong beside its modulation, nor any for as long as many of the last seconds were like that, where the level moves.
A notch that comes right over the carrier leaves quadrature empty all the same: the carrier sinks, and its sidebands do
not sink with it. Flat fading leaves quadrature empty, and the sidebands sink with the carrier.
"""

import numpy as np

from monitord.blocks import Complex, Flags, Precise
from monitord.stage import Bank

_WINDOW_S = 20.0
_SKEWED = 0.12  # rms of quadrature over rms of modulation; the depth is then wrong by about as much
_NOISE_CLEAR = 0.25  # of the noise's power, whose mean square over a hop scatters by a twentieth
_LEAST_POWER = 0.03**2  # modulation weaker than this tells nothing
_MANY = 0.2  # of the hops that told something
_FEWEST = 5
_MOVES = 0.06  # the highest level of each half second within the window, largest over smallest, less 1
_MOVES_NOISE = 10.0  # and that many times the deviation that noise gives a hop's level
_BLOCK_HOPS = 5
_SINKING_HOPS = 30
_SUNK = 0.6  # the carrier's largest within these hops over its smallest, in nepers: 5 dB
_FOLLOWS = (
    0.5  # slope of log sidebands over log carrier: 1 in flat fading, 0 where a notch crosses the carrier
)


class FadingWatch:
    """Watches the hops of one bank."""

    def __init__(self, bank: Bank) -> None:
        count, hops = len(bank.channels), round(_WINDOW_S / (bank.hop_s * _BLOCK_HOPS)) * _BLOCK_HOPS
        self._noise_hz = bank.noise_hz
        self._carrier_moves = np.array([one.carrier_control for one in bank.channels])  # by itself
        self._told = np.zeros((hops, count), bool)
        self._skewed = np.zeros((hops, count), bool)
        self._carrier = np.full((hops, count), np.nan)
        self._levels = np.full((2, hops, count), np.nan)  # log of the carrier and of its sidebands' rms
        self._place = 0

    def judge(self, samples: Complex, mean: Precise, modulation: Precise, noise_density: Precise) -> Flags:
        """Whether each row's hop is not to be trusted (channels,).

        samples: turned to the carrier's phase, complex64 (channels, frames), full scale = 1; mean: the carrier's
        tapered mean; modulation: mean square of m, noise subtracted; noise_density: as in Detected (channels,).
        """
        place = self._place = (self._place + 1) % len(self._told)
        noise = noise_density * self._noise_hz / np.square(mean)
        aside = np.einsum("cf,cf->c", samples.imag, samples.imag) / samples.shape[1] / np.square(mean) - noise
        self._told[place] = modulation > np.maximum(_LEAST_POWER, noise)
        skewed = self._told[place] & (aside > np.maximum(_SKEWED**2 * modulation, _NOISE_CLEAR * noise))
        carrier = samples.real.mean(axis=1, dtype=np.float64)
        self._carrier[place] = np.where(np.isfinite(mean), carrier, np.nan)
        sidebands = np.sqrt(np.maximum(modulation, 1e-12)) * mean
        self._levels[:, place] = np.where(
            self._told[place], np.log([np.maximum(carrier, 1e-12), sidebands]), np.nan
        )
        skewed |= self._sunk_alone() & ~self._carrier_moves
        self._skewed[place] = skewed
        told = np.maximum(self._told.sum(axis=0), _FEWEST)
        standing = self._skewed.sum(axis=0) > _MANY * told
        return np.asarray((skewed | standing) & self._moving(noise))

    def _sunk_alone(self) -> Flags:
        """Whether the carrier has sunk or risen within the last seconds and its sidebands have not (channels,)."""
        recent = (self._place - np.arange(_SINKING_HOPS)) % len(self._told)
        carrier, sidebands = self._levels[:, recent]
        moved = np.fmax.reduce(carrier) - np.fmin.reduce(carrier) > _SUNK
        if not moved.any():
            return np.asarray(moved)
        known = np.isfinite(carrier)
        count = np.maximum(known.sum(axis=0), 1)
        x = np.where(known, carrier - np.where(known, carrier, 0).sum(axis=0) / count, 0)
        slope = (x * np.where(known, sidebands, 0)).sum(axis=0) / np.maximum(np.square(x).sum(axis=0), 1e-12)
        return np.asarray(moved & (slope < _FOLLOWS))

    def _moving(self, noise: Precise) -> Flags:
        """Whether the carrier's level has moved within the window, or is not known yet (channels,).

        The highest hop of each half second tells: where a carrier is keyed down and up again, it stands.
        """
        blocks = np.fmax.reduce(self._carrier.reshape(-1, _BLOCK_HOPS, self._carrier.shape[1]), axis=1)
        if self._place % _BLOCK_HOPS < _BLOCK_HOPS - 1:
            blocks[self._place // _BLOCK_HOPS] = np.nan  # it is not over yet
        highest, lowest = np.fmax.reduce(blocks), np.fmin.reduce(blocks)
        least = np.maximum(_MOVES, _MOVES_NOISE * np.sqrt(noise / self._noise_hz * _BLOCK_HOPS))
        young = np.isfinite(self._carrier).sum(axis=0) <= _BLOCK_HOPS
        return np.asarray(young | (highest > (1 + least) * lowest))
