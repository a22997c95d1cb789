"""The ident in Morse code: was the expected one heard in time, when last, and at which tone frequency.

A tone's envelope, or the carrier's own amplitude, is cut into marks and spaces 240 times a second; what remains for
Python are the few moments a second at which a key goes down or up. A keyed carrier need not be locked for that: its
amplitude is known near the frequency last followed, or the nominal one.
"""

from collections.abc import Mapping

import numpy as np

from monitord.blocks import Detected, Flags, Precise
from monitord.condition.grid import STEPS
from monitord.measure.keying import Keying, MarkFrequency, ToneEnvelope
from monitord.measure.morse import IdentReader
from monitord.measure.tonedepth import LEAST_DEPTH
from monitord.quantities import Quantity
from monitord.stage import Bank

_GRACE_S = (
    1.5  # an ident is known once the space of a word has followed: 1.2 s at 5 words a minute, and a few hops
)


class IdentMeter:
    """Listens for the expected ident of each channel that has one.

    `ident_match` is 1 while the last one ended within `period_s`, 0 once that long was listened in vain, and NaN
    until either is so, or while there is no carrier to listen to.
    """

    quantities: tuple[Quantity, ...] = (
        Quantity("ident_match", "", "The expected ident was heard in time.", "DESIGN 4", flag=True),
        Quantity(
            "ident_last_timestamp_seconds",
            "s",
            "UTC at which the expected ident was last heard in full, seconds since 1970.",
            "ITU-R M.1677-1",
        ),
        Quantity(
            "ident_tone_hertz",
            "Hz",
            "Frequency of the ident's tone while it is keyed.",
            "DESIGN 4",
            trusted_only=True,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter. Idents by tone come first, then those by carrier."""
        self._count = len(bank.channels)
        wanted = [(row, channel.ident) for row, channel in enumerate(bank.channels) if channel.ident]
        tones = [(row, ident) for row, ident in wanted if ident.on == "tone"]
        carriers = [(row, ident) for row, ident in wanted if ident.on == "carrier"]
        self._tones = len(tones)
        self._rows = np.array([row for row, _ in tones + carriers], np.intp)
        self._period_s = np.array([ident.period_s for _, ident in tones + carriers])
        self._expected = [ident.expected for _, ident in tones + carriers]
        self._tone_hz = np.array([ident.tone_hz for _, ident in tones])
        self._hop_s = bank.hop_s
        self._envelope = ToneEnvelope(bank, self._rows[: self._tones].tolist(), self._tone_hz.tolist())
        least = [LEAST_DEPTH] * len(tones) + [0.0] * len(carriers)
        self._keying = Keying(len(self._rows), bank.hop_s / STEPS, least)
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        count = len(self._rows)
        self._envelope.reset()
        self._keying.reset()
        self._readers = [IdentReader(expected) for expected in self._expected]
        self._sure_from_s = np.full(count, np.inf)
        self._down = np.zeros(count, bool)
        self._listening = np.zeros(count, bool)
        self._listened_s = np.zeros(count)  # since the last ident
        self._heard_s = np.full(count, -np.inf)
        self._heard_utc = np.full(count, np.nan)
        self._now_s = 0.0
        self._begin()

    def _begin(self) -> None:
        self._frequency = MarkFrequency(len(self._rows), self._envelope.step_s)
        self._listened = np.zeros(len(self._rows), bool)

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        if not len(self._rows):
            return {}
        envelope, noise = self._key_signal(detected)
        keyed = self._keying.take(envelope, noise)
        self._frequency.take(keyed)
        self._now_s = detected.span.elapsed_s
        listening = np.isfinite(envelope).all(axis=1)
        self._listened |= listening
        self._listened_s += listening * self._hop_s
        start_s = self._now_s - (STEPS + self._keying.delay_steps) * self._envelope.step_s
        self._begin_anew(listening, start_s)
        self._follow(keyed.down, start_s, detected.span.utc)
        return {}

    def _key_signal(self, detected: Detected) -> tuple[np.ndarray, Precise]:
        """What is keyed (idents, STEPS), and the mean square of the noise in it (idents,)."""
        carriers = self._rows[self._tones :]
        envelope = np.concatenate([self._envelope.take(detected), detected.step_amplitude[carriers]])
        noise = detected.noise_density[carriers] * STEPS / self._hop_s
        return envelope, np.concatenate([self._envelope.noise_power(detected), noise])

    def _begin_anew(self, listening: Flags, start_s: float) -> None:
        """Where the signal has just come, or come back: no mark from before may be joined to one after."""
        for row in np.flatnonzero(listening & ~self._listening):
            self._readers[row].begin(start_s)
            self._sure_from_s[row] = np.inf
            self._down[row] = False
        self._listening = listening

    def _follow(self, down: Flags, start_s: float, utc: float | None) -> None:
        """Hand the moments at which keys moved to the readers, and ask those that wait for a space to pass."""
        before = np.concatenate([self._down[:, None], down[:, :-1]], axis=1)
        self._down = down[:, -1]
        for row, step in np.argwhere(down != before).tolist():
            reader = self._readers[row]
            turn = reader.down if down[row, step] else reader.up
            self._note(row, turn(start_s + step * self._envelope.step_s), utc)
            self._sure_from_s[row] = reader.sure_from_s
        end_s = start_s + STEPS * self._envelope.step_s
        for row in np.flatnonzero(self._sure_from_s <= end_s).tolist():
            self._note(row, self._readers[row].heard(end_s), utc)
            self._sure_from_s[row] = np.inf

    def _note(self, row: int, heard_s: float | None, utc: float | None) -> None:
        if heard_s is None:
            return
        ago_s = self._now_s - heard_s
        self._heard_s[row] = heard_s
        self._heard_utc[row] = np.nan if utc is None else utc - ago_s
        self._listened_s[row] = ago_s

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        match, heard_utc, tone_hz = np.full((3, self._count), np.nan)
        in_time = self._now_s - self._heard_s <= self._period_s + _GRACE_S
        in_vain = self._listened_s + self._hop_s / 2 >= self._period_s
        known = np.where(in_time, 1.0, np.where(in_vain, 0.0, np.nan))
        match[self._rows] = np.where(self._listened, known, np.nan)
        heard_utc[self._rows] = self._heard_utc
        tone_hz[self._rows[: self._tones]] = self._tone_hz + self._frequency.off_hz()[: self._tones]
        self._begin()
        return {
            "ident_match": match,
            "ident_last_timestamp_seconds": heard_utc,
            "ident_tone_hertz": tone_hz,
        }
