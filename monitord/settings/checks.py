"""The second pass over the settings: what depends on more than one value."""

import math
from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from monitord.settings.models import (
    MIN_BANDWIDTH_HZ,
    NAME,
    NAME_RULE,
    Channel,
    Raster,
    Source,
    Tone,
    host_port,
)
from monitord.settings.problems import Part, shown

MOST_CHANNELS = 2000
TONES_APART_HZ = 10.0  # each tone needs seven lines of the spectrum of a second for itself

OF_EVERY_KIND = frozenset(
    {
        *("kind", "sample_rate_hz", "center_hz", "gain", "remove_dc"),
        *("level_accuracy_db", "clock_accuracy_ratio", "oscillator_accuracy_ratio", "shared_clock"),
    }
)
_OF_KIND = {
    "socket": frozenset({"endpoint", "pattern", "attach", "framing", "topic", "datatype"}),
    "soundcard": frozenset({"device", "wiring"}),
    "recording": frozenset({"path", "pace", "datatype", "wiring"}),
    "simulated": frozenset({"pace"}),
}
_REQUIRED = {
    "endpoint": 'must be "tcp://host:port" or "ipc://path"',
    "sample_rate_hz": "must be the samples per second of the stream",
    "path": "must be the name of a recording",
    "datatype": 'must be the format of the samples, such as "cf32_le"',
}


@dataclass(frozen=True, slots=True)
class Range:
    """The span of a source: rate and centre in Hz, and whether it is a real IF."""

    rate_hz: float
    center_hz: float
    real: bool

    def __str__(self) -> str:
        form = "real IF" if self.real else f"IQ around {shown(self.center_hz)} Hz"
        return f"{form} at {shown(self.rate_hz)} samples per second"

    def room_hz(self, channel: Channel) -> float:
        """The largest bandwidth that fits in beside the channel's `acquire_hz`."""
        return self.rate_hz / (4 if self.real else 2) - channel.acquire_hz

    def carriers(self, channel: Channel) -> tuple[float, float]:
        """Lowest and highest carrier that the channel may have; for a real IF the lowest is just too low."""
        side = channel.bandwidth_hz + channel.acquire_hz
        low = self.center_hz - (0.0 if self.real else self.rate_hz / 2)
        return low + side, self.center_hz + self.rate_hz / 2 - side

    def trouble(self, channel: Channel) -> tuple[str, str] | None:
        """Key and complaint where the channel does not lie inside the span; None where it does."""
        room = self.room_hz(channel)
        if room < MIN_BANDWIDTH_HZ:
            most = room + channel.acquire_hz - MIN_BANDWIDTH_HZ
            return "acquire_hz", f"must be at most {shown(most)} Hz ({self})"
        if channel.bandwidth_hz > room or (self.real and channel.bandwidth_hz == room):
            return "bandwidth_hz", self._too_wide(channel)
        low, high = self.carriers(channel)
        if low < channel.carrier_hz <= high or (channel.carrier_hz == low and not self.real):
            return None
        return "carrier_hz", (
            f"must be {'above' if self.real else 'from'} {shown(low)} {'and at most' if self.real else 'to'}"
            f" {shown(high)} Hz, so that bandwidth_hz and acquire_hz ({shown(channel.bandwidth_hz)} Hz and"
            f" {shown(channel.acquire_hz)} Hz) lie inside the source's span ({self})"
        )

    def _too_wide(self, channel: Channel) -> str:
        most, part = ("less than", "a quarter") if self.real else ("at most", "half")
        return (
            f"must be {most} {shown(self.room_hz(channel))} Hz: {part} of the source's sample rate"
            f" ({shown(self.rate_hz)} Hz) less acquire_hz ({shown(channel.acquire_hz)} Hz)"
        )


def known_range(source: Source) -> Range | None:
    """The span as far as the settings tell it; None where only the stream or recording can."""
    real = source.real
    center_hz = 0.0 if real else source.center_hz
    described = source.kind == "socket" and source.framing == "described"
    if described and not real and "center_hz" not in source.model_fields_set:
        return None  # the messages say it
    if source.sample_rate_hz is None or center_hz is None:
        return None
    # Where the form is not known yet, the check for IQ is the one that a real IF must pass as well.
    return Range(source.sample_rate_hz, center_hz, bool(real))


def source_problems(part: Part[Source]) -> Iterator[str]:
    """Keys of another kind, missing keys, keys that contradict each other."""
    if not part.sound("kind"):
        return
    yield from _foreign_keys(part)
    yield from _missing_keys(part)
    source = part.model
    if source.topic is not None and part.sound("pattern") and source.pattern == "pull":
        yield part.problem("topic", 'serves pattern = "sub" only; leave it out')
    if source.endpoint is not None and part.sound("attach") and source.attach == "connect":
        address = host_port(source.endpoint.removeprefix("tcp://"))
        if address is not None and (address[0] == "*" or address[1] == 0):
            yield part.problem("endpoint", 'must name a host and a port (not 0) with attach = "connect"')
    if source.shared_clock and source.oscillator_accuracy_ratio:
        yield part.problem(
            "oscillator_accuracy_ratio",
            "must be left out with shared_clock = true: clock_accuracy_ratio holds for both",
        )
    if source.real and source.center_hz:
        yield part.problem("center_hz", "must be 0 or left out for a real IF (carrier_hz is then the IF)")


def _foreign_keys(part: Part[Source]) -> Iterator[str]:
    kind = part.model.kind
    for key in sorted(part.model.model_fields_set - OF_EVERY_KIND - _OF_KIND[kind]):
        owners = " or ".join(f'"{owner}"' for owner, keys in _OF_KIND.items() if key in keys)
        yield part.problem(key, f'belongs to kind = {owners}, not to "{kind}"; leave it out')


def _missing_keys(part: Part[Source]) -> Iterator[str]:
    source = part.model
    needed: tuple[str, ...] = ()
    if source.kind == "socket":
        # Where framing itself is wrong, nobody knows whether the messages say their datatype.
        bare = source.framing == "bare" and part.sound("framing")
        needed = ("endpoint", "sample_rate_hz", *(("datatype",) if bare else ()))
    if source.kind == "recording":
        needed = ("path",)
    for key in needed:
        if part.sound(key) and getattr(source, key) is None:
            yield f"{part.where}.{key}: missing; {_REQUIRED[key]}"


def channel_problems(parts: Sequence[Part[Channel]], span: Range | None) -> Iterator[str]:
    """Names used twice, bandwidths that contradict each other, channels outside the span."""
    first: dict[str, str] = {}
    for part in parts:
        name = part.model.name
        if part.sound("name") and first.setdefault(name, part.where) != part.where:
            yield part.problem("name", f"is the name of {first[name]} too; must be a name of its own")
        yield from _emission_problems(part)
        yield from _reference_problems(part)
        yield from _tone_problems(part)
        yield from _ident_problems(part)
        if span is not None and part.sound("carrier_hz", "bandwidth_hz", "acquire_hz"):
            trouble = span.trouble(part.model)
            if trouble is not None:
                yield part.problem(*trouble)


def _emission_problems(part: Part[Channel] | Part[Raster]) -> Iterator[str]:
    model = part.model
    sound = part.sound("bandwidth_hz", "emission_bandwidth_hz")
    if sound and model.emission_bandwidth_hz < model.bandwidth_hz:
        yield part.problem(
            "emission_bandwidth_hz", f"must be at least bandwidth_hz: {shown(model.bandwidth_hz)} Hz"
        )


def _tone_problems(part: Part[Channel] | Part[Raster]) -> Iterator[str]:
    """Tones outside the channel's audio band, too near to each other, or keyed with a band."""
    model = part.model
    for index, tone in enumerate(model.tone):
        place = f"{part.where}.tone[{index}]"
        if part.sound("bandwidth_hz") and tone.hz + (tone.band_hz or 0) / 2 > model.bandwidth_hz:
            what = "must lie within" if tone.band_hz is None else "must lie, with its band_hz, within"
            yield f"{place}.hz = {shown(tone.hz)}: {what} bandwidth_hz: {shown(model.bandwidth_hz)} Hz"
        if tone.keyed and tone.band_hz is not None:
            yield f"{place}.band_hz = {shown(tone.band_hz)}: must be left out of a tone with keyed = true"
        yield from _neighbour_problems(place, tone, model.tone[:index])


def _ident_problems(part: Part[Channel] | Part[Raster]) -> Iterator[str]:
    ident, bandwidth_hz = part.model.ident, part.model.bandwidth_hz
    if ident is None or ident.on == "carrier" or not part.sound("bandwidth_hz"):
        return
    if ident.tone_hz > bandwidth_hz:
        text = f"must lie within bandwidth_hz: {shown(bandwidth_hz)} Hz"
        yield f"{part.where}.ident.tone_hz = {shown(ident.tone_hz)}: {text}"


def _neighbour_problems(place: str, tone: Tone, others: Sequence[Tone]) -> Iterator[str]:
    near = next((other for other in others if abs(other.hz - tone.hz) < TONES_APART_HZ), None)
    if near is not None:
        text = f"must be at least {shown(TONES_APART_HZ)} Hz from the other tones ({shown(near.hz)} Hz)"
        yield f"{place}.hz = {shown(tone.hz)}: {text}"


def _reference_problems(part: Part[Channel] | Part[Raster]) -> Iterator[str]:
    model = part.model
    if model.carrier_control and model.depth_reference == "unmodulated":
        yield part.problem(
            "depth_reference", 'must be "present" with carrier_control = true: the carrier moves'
        )


def raster_carriers(part: Part[Raster], problems: list[str]) -> list[float]:
    """Carriers of one raster in Hz, ascending; none where its frequencies are wrong."""
    raster = part.model
    problems.extend(_emission_problems(part))
    problems.extend(_reference_problems(part))
    problems.extend(_tone_problems(part))
    problems.extend(_ident_problems(part))
    found = list(_step_problems(part))
    problems.extend(found)
    if found or not part.sound("first_hz", "last_hz", "step_hz"):
        return []
    # A hair more than the quotient, so that a step such as 25000/3 still meets its last carrier.
    count = math.floor((raster.last_hz - raster.first_hz) / raster.step_hz + 1e-6) + 1
    return [raster.first_hz + index * raster.step_hz for index in range(count)]


def _step_problems(part: Part[Raster]) -> Iterator[str]:
    raster = part.model
    if not part.sound("first_hz", "last_hz"):
        return
    width = raster.last_hz - raster.first_hz
    if width < 0:
        yield part.problem("last_hz", f"must be at least first_hz ({shown(raster.first_hz)})")
    elif part.sound("step_hz") and width / raster.step_hz >= MOST_CHANNELS:
        most = f"at most {MOST_CHANNELS} channels are possible"
        yield part.problem("step_hz", f"must be more than {shown(width / MOST_CHANNELS)} Hz: {most}")


def raster_channels(part: Part[Raster], carriers: Sequence[float], problems: list[str]) -> list[Channel]:
    """One channel for each carrier; none where their names are wrong."""
    raster = part.model
    if not part.sound("name"):
        return []
    names = [raster.name.replace("{khz}", f"{carrier / 1000:g}") for carrier in carriers]
    wrong = next((name for name in names if NAME.fullmatch(name) is None), None)
    twice = next((name for name, count in Counter(names).items() if count > 1), None)
    if wrong is not None:
        problems.append(part.problem("name", f"gives {shown(wrong)}; a channel's name must be {NAME_RULE}"))
    elif twice is not None:
        problems.append(part.problem("name", f"gives {shown(twice)} twice; it must tell the carriers apart"))
    else:
        shared = raster.shared()
        return [Channel(name=n, carrier_hz=c, **shared) for n, c in zip(names, carriers, strict=True)]
    return []


def raster_span_problems(part: Part[Raster], carriers: Sequence[float], span: Range) -> Iterator[str]:
    """The ends of a raster that lie outside the span: a line each, however many channels lie there."""
    if not carriers or not part.sound("bandwidth_hz", "acquire_hz"):
        return
    shared = part.model.shared()
    for key, carrier_hz in (("first_hz", carriers[0]), ("last_hz", carriers[-1])):
        trouble = span.trouble(Channel(name="x", carrier_hz=carrier_hz, **shared))
        if trouble is None:
            continue
        if trouble[0] != "carrier_hz":
            yield part.problem(*trouble)
            return
        yield part.problem(key, trouble[1])
