"""Where samples come from: each kind of source is one file here and one line in `SOURCES`.

Every source implements `SampleSource` (stage.py). Its module is imported only when it is used, so that the
daemon never loads the libraries of a source it does not have.
"""

from collections.abc import Callable, Mapping, Sequence

from monitord.settings import Channel, Source
from monitord.stage import SampleSource


def _socket(settings: Source, channels: Sequence[Channel]) -> SampleSource:
    from monitord.acquire.socket import SocketSource

    return SocketSource(settings)


def _recording(settings: Source, channels: Sequence[Channel]) -> SampleSource:
    from monitord.acquire.recording import RecordingSource

    return RecordingSource(settings)


def _simulated(settings: Source, channels: Sequence[Channel]) -> SampleSource:
    from monitord.acquire.simulated import SimulatedSource

    return SimulatedSource(settings, channels)


SOURCES: Mapping[str, Callable[[Source, Sequence[Channel]], SampleSource]] = {
    "socket": _socket,
    "recording": _recording,
    "simulated": _simulated,
}


def make_source(settings: Source, channels: Sequence[Channel] = ()) -> SampleSource:
    """Make the source that the settings ask for; it is not open yet.

    Only the simulated source looks at the channels: it puts a transmitter on each.
    """
    return SOURCES[settings.kind](settings, channels)
