"""What a quantity is. Each meter declares its own; the page, the replay output and the tests find them there."""

from dataclasses import dataclass


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
    """

    name: str
    unit: str
    meaning: str
    source: str
    flag: bool = False
    trusted_only: bool = False
    label: str = ""
    keys: tuple[str, ...] = ()
