"""From detected hops to Moments and Readings. A new meter is one file here and one name in `METERS`."""

from collections.abc import Callable, Mapping, Sequence

from monitord.blocks import Precise
from monitord.measure.audiobandwidth import AudioBandwidthMeter
from monitord.measure.carrier import CarrierMeter
from monitord.measure.carriershift import CarrierShiftMeter
from monitord.measure.cochannel import level_uncertainty
from monitord.measure.disagreement import DisagreementMeter
from monitord.measure.excursions import ExcursionMeter
from monitord.measure.flattops import FlatTopMeter
from monitord.measure.gainchange import GainChangeMeter
from monitord.measure.hum import HumMeter
from monitord.measure.ident import IdentMeter
from monitord.measure.interference import InterferenceMeter
from monitord.measure.loudness import LoudnessMeter
from monitord.measure.mask import EmissionMaskMeter
from monitord.measure.modulation import ModulationMeter
from monitord.measure.occupied import OccupiedBandwidthMeter
from monitord.measure.pausenoise import PauseNoiseMeter
from monitord.measure.quadrature import QuadratureMeter
from monitord.measure.sidebandbalance import SidebandBalanceMeter
from monitord.measure.silence import SilenceMeter
from monitord.measure.testtone import SteadyToneMeter
from monitord.measure.tonedepth import ToneDepthMeter
from monitord.quantities import Quantity
from monitord.settings import Channel
from monitord.stage import Bank, Meter

METERS: tuple[type[Meter], ...] = (
    CarrierMeter,
    ModulationMeter,
    ExcursionMeter,
    ToneDepthMeter,
    IdentMeter,
    SteadyToneMeter,
    FlatTopMeter,
    SilenceMeter,
    AudioBandwidthMeter,
    QuadratureMeter,
    SidebandBalanceMeter,
    DisagreementMeter,
    CarrierShiftMeter,
    PauseNoiseMeter,
    HumMeter,
    LoudnessMeter,
    InterferenceMeter,
    GainChangeMeter,
    OccupiedBandwidthMeter,
    EmissionMaskMeter,
)

JOINED: tuple[Callable[[Bank, Mapping[str, Precise]], Mapping[str, Precise]], ...] = (level_uncertainty,)
"""What rests on quantities of more than one meter: functions of a reading's values that give some of them anew."""


def quantities_of(
    channels: Sequence[Channel], more_meters: Sequence[type[Meter]] = ()
) -> tuple[Quantity, ...]:
    """All quantities of all meters, with the label values that these channels' settings name."""
    meters = (*METERS, *more_meters)
    return tuple(quantity.resolved(channels) for meter in meters for quantity in meter.quantities)
