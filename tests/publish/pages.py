"""A metrics page with little in it, and what a scraper reads from it."""

from collections.abc import Iterable, Sequence

from prometheus_client import parser
from prometheus_client.openmetrics.parser import text_string_to_metric_families as open_families
from prometheus_client.samples import Sample

from monitord.publish.metrics import MetricsPage
from monitord.publish.tally import Tally
from monitord.quantities import Quantity
from tests.publish.given import CHANNELS, QUANTITIES


def full_tally() -> Tally:
    return Tally(
        up=True,
        samples=480_000,
        lost={"overflow": 0, "sequence": 7},
        rejected={"length": 0},
        level_dbfs=-12.5,
        last_sample_utc=1_767_225_612.345,
        lag_s=0.02,
        busy_ratio=0.01,
        stage_seconds={"detect": 1.5},
        stage_failures={"CarrierMeter": 0},
    )


def make_page(
    channels: Sequence[str] = CHANNELS,
    quantities: Sequence[Quantity] = QUANTITIES,
    tally: Tally | None = None,
) -> MetricsPage:
    return MetricsPage(channels, quantities, tally or full_tally(), "0.1.0", renewal_s=0.0)


def samples(page: MetricsPage) -> dict[tuple[str, ...], float]:
    """The page as {(name, label value, ...): value}, names without prefix; both formats must say the same."""
    text = page.render(openmetrics=False).decode()
    opened = page.render(openmetrics=True).decode()

    def table(parsed: Iterable[Sample]) -> dict[tuple[str, ...], float]:
        return {
            (sample.name.removeprefix("monitord_"), *sample.labels.values()): sample.value
            for sample in parsed
            if sample.name.startswith("monitord_")
        }

    of_text = table([s for family in parser.text_string_to_metric_families(text) for s in family.samples])
    of_open = table([s for family in open_families(opened) for s in family.samples])
    assert of_text == of_open
    assert of_text
    return of_text


def named(found: dict[tuple[str, ...], float], name: str) -> dict[tuple[str, ...], float]:
    return {key[1:]: value for key, value in found.items() if key[0] == name}
