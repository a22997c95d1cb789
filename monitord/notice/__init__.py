"""From Moments and Readings to Events. A new rule is one file here and one name in `RULES`."""

from monitord.notice.losses import CarrierLossRule
from monitord.notice.overmodulation import OvermodulationRule
from monitord.stage import Rule

RULES: tuple[type[Rule], ...] = (
    CarrierLossRule,
    OvermodulationRule,
)
