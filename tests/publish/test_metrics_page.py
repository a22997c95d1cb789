"""The metrics page as a whole: its formats, its cost, and its use from several threads."""

import shutil
import subprocess
import threading
import time
from collections.abc import Callable

import numpy as np
import pytest
from prometheus_client import Metric, openmetrics, parser
from prometheus_client.openmetrics.parser import text_string_to_metric_families as open_families

from monitord.publish.metrics import MetricsPage
from monitord.quantities import Quantity
from tests.publish.given import CHANNELS, QUANTITIES, event, moment, reading
from tests.publish.pages import full_tally, make_page, samples

# Every gauge that INTERFACE promises for a channel: the names must please the linter before the meters exist.
PROMISED = """
carrier_level_dbfs carrier_level_change_db carrier_level_dbm field_strength_dbuv_per_meter
carrier_frequency_offset_hertz carrier_to_noise_density_dbhz carrier_shift_ratio
modulation_positive_peak_ratio modulation_negative_peak_ratio
modulation_recurring_positive_peak_ratio modulation_recurring_negative_peak_ratio
modulation_rms_ratio incidental_phase_radians sideband_balance_db detector_disagreement_ratio
audio_signal_to_noise_db audio_noise_db audio_hum_db audio_bandwidth_hertz
audio_loudness_momentary_lufs audio_loudness_short_term_lufs audio_loudness_integrated_lufs
audio_flat_top_ratio audio_tone_hertz audio_sinad_db audio_thd_ratio occupied_bandwidth_hertz
bandwidth_26db_hertz tone_depth_difference_ratio tone_depth_sum_ratio residual_modulation_ratio
ident_last_timestamp_seconds ident_tone_hertz carrier_level_uncertainty_db
carrier_frequency_uncertainty_hertz modulation_peak_uncertainty_ratio
"""


def test_each_family_is_described_once_and_the_process_is_there() -> None:
    page = make_page()
    page.reading(reading({"carrier_level_dbfs": [-20.0, -30.0]}))
    for opened in (False, True):
        lines = page.render(opened).decode().splitlines()
        kinds = [line.split()[2] for line in lines if line.startswith("# TYPE")]
        helps = [line.split()[2] for line in lines if line.startswith("# HELP")]
        assert len(set(kinds)) == len(kinds)
        assert helps == kinds
        assert any(line.startswith("process_resident_memory_bytes ") for line in lines)
    assert "# TYPE monitord_events counter" in lines
    assert lines[-1] == "# EOF"
    assert lines.count("# EOF") == 1


def test_names_with_special_characters_survive_both_formats() -> None:
    odd = 'a\\b"c\nd'
    quantity = Quantity("carrier_level_dbfs", "dBFS", odd, "house rule")
    page = make_page(channels=(odd,), quantities=(quantity,))
    page.reading(reading({"carrier_level_dbfs": [-20.0]}, channels=(odd,)))
    assert samples(page)["carrier_level_dbfs", odd] == -20.0
    families = {family.name: family for family in open_families(page.render(True).decode())}
    assert families["monitord_carrier_level_dbfs"].documentation == f"{odd} (dBFS)."


def test_promtool_has_nothing_to_say_about_the_page() -> None:
    promtool = shutil.which("promtool")
    if promtool is None:
        pytest.skip("promtool is not installed (package prometheus)")
    quantities = (
        *QUANTITIES,
        *(Quantity(n, "", "Promised.", "") for n in PROMISED.split() if n not in str(QUANTITIES)),
    )
    page = make_page(quantities=quantities)
    page.reading(reading({q.name: np.full((2, len(q.keys)) if q.label else 2, 0.5) for q in quantities}))
    body = page.render(openmetrics=False)
    written = {family.name for family in parser.text_string_to_metric_families(body.decode())}
    assert written >= {f"monitord_{quantity.name}" for quantity in quantities}
    checked = subprocess.run([promtool, "check", "metrics"], input=body, capture_output=True, timeout=20)
    assert (checked.returncode, checked.stdout, checked.stderr) == (0, b"", b"")


def test_a_young_page_is_served_again_and_an_older_one_is_not() -> None:
    page = MetricsPage(CHANNELS, QUANTITIES, full_tally(), "0.1.0", renewal_s=0.1)
    first = page.render(False)
    page.event(event(1, "carrier-loss"))
    told = time.monotonic()
    while b'alarm_active{channel="mw-936",alarm="carrier-loss"} 1' not in page.render(False):
        assert time.monotonic() - told < 1.0
    assert time.monotonic() - told < 0.3
    assert page.render(False) != first


def test_pages_stay_whole_while_the_chain_goes_on() -> None:
    """Peak and level of one reading are equal: a page that mixes two readings would show it."""
    page = make_page()
    enough, read, told = threading.Event(), threading.Event(), []

    def chain() -> None:
        while not enough.is_set():
            index = len(told)
            values = [float(index), float(index)]
            page.moment(moment(index=index))
            page.reading(
                reading({"carrier_level_dbfs": values, "modulation_negative_peak_ratio": values}, index=index)
            )
            page.event(event(index, "carrier-loss", ended_s=13.0))
            told.append(index)
            if index % 10 == 9:  # or the pages would never get their turn
                read.wait()
                read.clear()

    worker = threading.Thread(target=chain)
    worker.start()
    seen = set()
    try:
        while len(seen) < 4:
            families = {
                family.name: family.samples
                for family in parser.text_string_to_metric_families(page.render(False).decode())
            }
            levels = [sample.value for sample in families.get("monitord_carrier_level_dbfs", [])]
            peaks = [sample.value for sample in families.get("monitord_modulation_negative_peak_ratio", [])]
            assert levels == peaks
            seen.update(levels)
            read.set()
    finally:
        enough.set()
        read.set()
        worker.join()
    assert samples(page)["carrier_loss_events_total", "mw-936"] == len(told)


def test_the_lines_of_120_channels_cost_less_than_a_general_writer() -> None:
    """A ratio measured side by side, so that a slow or busy machine does not decide."""
    channels = tuple(f"mw-{531 + 9 * row}" for row in range(120))
    quantities = [Quantity(f"quantity_{row}_db", "dB", "A number.", "") for row in range(70)]
    page = make_page(channels, quantities)
    values = np.random.default_rng(1).normal(size=(70, 120))

    def told() -> None:
        changed = values + time.perf_counter()
        page.reading(reading({q.name: changed[row] for row, q in enumerate(quantities)}, channels=channels))

    told()
    families = list(open_families(page.render(True).decode()))

    class Parsed:
        def collect(self) -> list[Metric]:
            return list(families)

    def fastest(work: Callable[[], object]) -> float:
        times = []
        for _ in range(3):
            told()
            begin = time.perf_counter()
            work()
            times.append(time.perf_counter() - begin)
        return min(times)

    ours = fastest(lambda: page.render(True))
    general = fastest(lambda: openmetrics.exposition.generate_latest(Parsed()))
    print(f"120 channels: {1e3 * ours:.1f} ms, general writer {1e3 * general:.1f} ms")
    assert ours < general / 2


def test_slot_peaks_are_a_histogram_from_the_first_scrape_on() -> None:
    page = MetricsPage(CHANNELS, QUANTITIES, full_tally(), "0.1.0", renewal_s=0.0)
    name = "monitord_modulation_slot_peak_ratio"
    first = page.render(openmetrics=False).decode()
    assert f'{name}_count{{channel="mw-936",polarity="negative"}} 0' in first
    page.moment(moment(index=0, negative_peak=[0.97, np.nan], positive_peak=[1.3, np.nan]))
    page.moment(moment(index=1, negative_peak=[0.5, np.nan], positive_peak=[0.4, np.nan]))
    page.moment(moment(index=2, negative_peak=[2.0, np.nan], positive_peak=[2.0, np.nan], faults=[1, 0]))
    for form in (False, True):
        lines = dict(line.rsplit(" ", 1) for line in page.render(form).decode().splitlines() if name in line)
        of = 'channel="mw-936",polarity="negative"'
        assert lines[f'{name}_bucket{{{of},le="0.5"}}'] == "1"
        assert lines[f'{name}_bucket{{{of},le="0.95"}}'] == "1"
        assert lines[f'{name}_bucket{{{of},le="1.0"}}'] == "2"
        assert lines[f'{name}_bucket{{{of},le="+Inf"}}'] == "2"
        assert lines[f"{name}_count{{{of}}}"] == "2"
        assert float(lines[f"{name}_sum{{{of}}}"]) == pytest.approx(1.47)
        other = 'channel="lw-153",polarity="positive"'
        assert lines[f"{name}_count{{{other}}}"] == "0"
