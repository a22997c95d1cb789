"""What the chain and the source count for the metrics page."""

from dataclasses import dataclass, field
from math import nan


@dataclass(slots=True)
class Tally:
    """Numbers of the source and the daemon. One thread writes, the page reads at each scrape.

    Put every key of the dictionaries in at the start (with 0), so that each counter is on the page from the
    first scrape on.

    up: the source delivers.
    samples: samples taken over.
    lost: samples known to be lost, by reason.
    clipped: samples at full scale.
    rejected: messages rejected whole, by reason.
    reconnects: how often the source was connected anew.
    level_dbfs: level of the source's samples, dBFS; NaN where not known.
    last_sample_utc: UTC of the last sample, seconds since 1970; NaN where not known.
    lag_s: how far the chain is behind its source, seconds; NaN where not known.
    busy_ratio: share of real time in which the chain works, 1 = all of it; NaN where not known.
    stage_seconds: time spent, by stage, seconds.
    stage_failures: failures caught, by stage.
    settings_ok: the last reading of the settings succeeded.
    """

    up: bool = False
    samples: int = 0
    lost: dict[str, int] = field(default_factory=dict)
    clipped: int = 0
    rejected: dict[str, int] = field(default_factory=dict)
    reconnects: int = 0
    level_dbfs: float = nan
    last_sample_utc: float = nan
    lag_s: float = nan
    busy_ratio: float = nan
    stage_seconds: dict[str, float] = field(default_factory=dict)
    stage_failures: dict[str, int] = field(default_factory=dict)
    settings_ok: bool = True
