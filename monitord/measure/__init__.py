"""From detected hops to Moments and Readings. A new meter is one file here and one name in `METERS`."""

from monitord.measure.carrier import CarrierMeter
from monitord.measure.excursions import ExcursionMeter
from monitord.measure.modulation import ModulationMeter
from monitord.quantities import Quantity
from monitord.stage import Meter

METERS: tuple[type[Meter], ...] = (
    CarrierMeter,
    ModulationMeter,
    ExcursionMeter,
)

QUANTITIES: tuple[Quantity, ...] = tuple(quantity for meter in METERS for quantity in meter().quantities)
