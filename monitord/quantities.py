"""What a quantity is. Each meter declares its own; the page, the replay output and the tests find them there."""

from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace

from monitord.settings import Channel

COVERAGE = 1.96
"""Coverage factor of all uncertainties: 95 % of a normal distribution (JCGM 100, G.2.3)."""


@dataclass(frozen=True, slots=True)
class Quantity:
    """One measured quantity of a channel.

    name: its name everywhere, without the prefix `monitord_`.
    unit: what a person reads beside the number ("dBFS", "Hz", "" for a ratio).
    meaning: one sentence.
    source: where the definition comes from.
    flag: the quantity is 0 or 1, and its gauge stands on the page from the first scrape on.
    trusted_only: the gauge is absent while the reading is invalid (modulation and audio).
    label, keys: the second label and its fixed values, for quantities that have one.
    keys_of: where the settings name those values: what a channel contributes (`resolved` makes `keys` of it).
    """

    name: str
    unit: str
    meaning: str
    source: str
    flag: bool = False
    trusted_only: bool = False
    label: str = ""
    keys: tuple[str, ...] = ()
    keys_of: Callable[[Channel], Iterable[str]] | None = None

    def resolved(self, channels: Iterable[Channel]) -> "Quantity":
        """The quantity with the label values that these channels' settings name, each once, in their order."""
        if self.keys_of is None:
            return self
        return replace(self, keys=tuple(dict.fromkeys(key for one in channels for key in self.keys_of(one))))
