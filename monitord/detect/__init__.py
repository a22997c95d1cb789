"""From baseband to modulation. A new detector is one file here and one line in `DETECTORS`."""

from collections.abc import Mapping

from monitord.detect.envelope import EnvelopeDetector
from monitord.detect.rectifier import RectifierDetector
from monitord.detect.sideband import LowerSidebandDetector, UpperSidebandDetector
from monitord.detect.suppressed import SuppressedCarrierDetector
from monitord.detect.synchronous import SynchronousDetector
from monitord.stage import Detector

DETECTORS: Mapping[str, type[Detector]] = {
    "synchronous": SynchronousDetector,
    "envelope": EnvelopeDetector,
    "rectifier": RectifierDetector,
    "upper-sideband": UpperSidebandDetector,
    "lower-sideband": LowerSidebandDetector,
    "suppressed-carrier": SuppressedCarrierDetector,
}
