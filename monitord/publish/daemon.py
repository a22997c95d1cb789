"""Metric families of the source and the daemon, and the page part that prometheus-client writes."""

from collections.abc import Iterator, Mapping
from math import isfinite

from prometheus_client import CollectorRegistry, ProcessCollector
from prometheus_client.core import CounterMetricFamily, GaugeMetricFamily, InfoMetricFamily, Metric
from prometheus_client.exposition import choose_encoder, generate_latest
from prometheus_client.registry import Collector

from monitord.notice.kinds import SOURCE_ALARMS, SOURCE_KINDS
from monitord.publish.families import PREFIX
from monitord.publish.tally import Tally

END = b"# EOF\n"

_write_openmetrics, _ = choose_encoder("application/openmetrics-text")


class DaemonFamilies(Collector):
    """Families without a channel, with those of the process, in a registry of their own.

    lost: the source is lost, whatever the tally says.
    events: how many events of each source kind began.
    alarms: 1 for each alarm of the source while an event of it is open, else 0.
    """

    def __init__(self, tally: Tally, version: str) -> None:
        self.lost = False
        self.events = dict.fromkeys(SOURCE_KINDS, 0)
        self.alarms = dict.fromkeys(SOURCE_ALARMS, 0)
        self._tally = tally
        self._version = version
        self._registry = CollectorRegistry()
        ProcessCollector(registry=self._registry)
        self._registry.register(self)

    def text(self, openmetrics: bool) -> bytes:
        """Write the families, without the end mark of OpenMetrics."""
        if openmetrics:
            return _write_openmetrics(self._registry).removesuffix(END)
        return generate_latest(self._registry)

    def collect(self) -> Iterator[Metric]:
        """Families with the numbers of this moment."""
        build = InfoMetricFamily(PREFIX + "build", "The version of monitord.")
        build.add_metric([], {"version": self._version})
        yield build
        yield from self._of_the_source()
        yield from self._of_the_daemon()
        yield _counters(
            "source_events_total", "Events of the source and the daemon begun.", "kind", self.events
        )
        alarms = GaugeMetricFamily(
            PREFIX + "source_alarm_active", "Whether an event of the source is open.", labels=["alarm"]
        )
        for alarm, active in dict(self.alarms).items():
            alarms.add_metric([alarm], active)
        yield alarms

    def _of_the_source(self) -> Iterator[Metric]:
        tally = self._tally
        up = tally.up and not self.lost
        yield _gauge("source_up", "Whether the source delivers samples.", up)
        yield _counter("source_samples_total", "Samples taken over from the source.", tally.samples)
        yield _counters(
            "source_lost_samples_total", "Samples known to be lost on the way.", "reason", tally.lost
        )
        yield _counter("source_clipped_samples_total", "Samples at full scale.", tally.clipped)
        yield _counters(
            "source_rejected_messages_total", "Messages rejected whole.", "reason", tally.rejected
        )
        yield _counter("source_reconnects_total", "Times the source was connected anew.", tally.reconnects)
        if up and isfinite(tally.level_dbfs):
            yield _gauge("source_level_dbfs", "Level of the source's samples, dBFS.", tally.level_dbfs)
        if isfinite(tally.last_sample_utc):
            yield _gauge(
                "source_last_sample_timestamp_seconds", "UTC of the last sample.", tally.last_sample_utc
            )

    def _of_the_daemon(self) -> Iterator[Metric]:
        tally = self._tally
        if isfinite(tally.lag_s):
            yield _gauge("chain_lag_seconds", "How far the chain is behind its source.", tally.lag_s)
        if isfinite(tally.busy_ratio):
            yield _gauge("chain_busy_ratio", "Share of real time in which the chain works.", tally.busy_ratio)
        yield _counters("stage_seconds_total", "Time spent in a stage.", "stage", tally.stage_seconds)
        yield _counters("stage_failures_total", "Failures of a stage.", "stage", tally.stage_failures)
        yield _gauge(
            "settings_last_reload_success", "Whether the settings last read are in force.", tally.settings_ok
        )


def _gauge(name: str, meaning: str, value: float) -> Metric:
    return GaugeMetricFamily(PREFIX + name, meaning, value=value)


def _counter(name: str, meaning: str, value: float) -> Metric:
    return CounterMetricFamily(PREFIX + name, meaning, value=value)


def _counters(name: str, meaning: str, label: str, values: Mapping[str, float]) -> Metric:
    family = CounterMetricFamily(PREFIX + name, meaning, labels=[label])
    # A copy first: the writer may add a key meanwhile.
    for key, value in dict(values).items():
        family.add_metric([key], value)
    return family
