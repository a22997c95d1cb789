"""What other carriers in the channel do to the level: their beat with the carrier, as its tapered mean lets it through.

A carrier of amplitude a, f away, adds a cos(2 pi f t) in phase. A Hann window of T seconds passes
|sinc(f T) / (1 - (f T)^2)| of it (Harris 1978). A sinusoid of amplitude u stays within u all of the time, and within
0.997 u for 95 % of it, so u is its expanded uncertainty.
"""

import math
from collections.abc import Mapping

import numpy as np

from monitord.blocks import Precise
from monitord.stage import Bank

_LEVEL_KNOWN = 1.06  # the other carrier's own level is known within half a decibel
_DB_PER_NEPER = 20 / math.log(10)


def passed(offset_hz: Precise, average_s: float) -> Precise:
    """Part of a beat of this frequency that the mean over `average_s` lets through."""
    turns = np.abs(offset_hz) * average_s
    near = np.isclose(turns, 1)
    divisor = np.where(near, 1, 1 - np.square(turns))
    return np.asarray(np.where(near, 0.5, np.abs(np.sinc(turns) / divisor)))


def level_uncertainty(bank: Bank, values: Mapping[str, Precise]) -> Mapping[str, Precise]:
    """The level's uncertainty with that of the other carriers in it: of the quantities of one reading."""
    offset_hz, level_db = values["interferer_offset_hertz"], values["interferer_level_db"]
    there = np.isfinite(level_db)
    amplitude = np.where(there, 10 ** (np.where(there, level_db, 0) / 20), 0)
    average_s = bank.channels[0].averaging_s
    beats = amplitude * passed(np.where(there, offset_hz, 0), average_s) * _LEVEL_KNOWN * _DB_PER_NEPER
    own = values["carrier_level_uncertainty_db"]
    return {"carrier_level_uncertainty_db": np.sqrt(np.square(own) + np.square(beats).sum(axis=1))}
