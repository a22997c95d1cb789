"""What the metrics page says, read by the parsers that scrapers use."""

import numpy as np
import pytest

from monitord.blocks import FAULT_NAMES, Fault
from monitord.notice.kinds import CHANNEL_KINDS, SOURCE_ALARMS, SOURCE_KINDS
from monitord.quantities import Quantity
from tests.publish.given import CHANNELS, QUANTITIES, event, moment, reading
from tests.publish.pages import full_tally, make_page, named, samples


def test_counters_and_flags_are_there_at_zero_before_anything_was_measured() -> None:
    found = samples(make_page())
    for name in ("carrier_present", "carrier_loop_locked", "reading_valid", "audio_silent"):
        assert named(found, name) == {("mw-936",): 0, ("lw-153",): 0}, name
    for name in ("carrier_loss_events_total", "carrier_absent_seconds_total"):
        assert named(found, name) == {("mw-936",): 0, ("lw-153",): 0}, name
    for name in ("overmodulation_events_total", "overmodulation_seconds_total"):
        assert named(found, name) == {(c, p): 0 for c in CHANNELS for p in ("negative", "positive")}, name
    for name in ("events_total", "alarm_active"):
        assert named(found, name) == {(c, kind): 0 for c in CHANNELS for kind in CHANNEL_KINDS}, name
    assert named(found, "reading_fault") == {(c, f): 0 for c in CHANNELS for f in FAULT_NAMES.values()}
    assert named(found, "source_events_total") == {(kind,): 0 for kind in SOURCE_KINDS}
    assert named(found, "source_alarm_active") == {(alarm,): 0 for alarm in SOURCE_ALARMS}


def test_a_quantity_is_absent_until_it_is_measured_and_where_it_is_not_finite() -> None:
    page = make_page()
    assert not named(samples(page), "carrier_level_dbfs")
    page.reading(
        reading(
            {
                "carrier_level_dbfs": [-20.25, np.nan],
                "carrier_frequency_offset_hertz": [-np.inf, 0.123456789],
                "audio_weighted_noise_db": [[-60.5, np.nan], [np.nan, -70.0]],
            }
        )
    )
    found = samples(page)
    assert named(found, "carrier_level_dbfs") == {("mw-936",): -20.25}
    assert named(found, "carrier_frequency_offset_hertz") == {("lw-153",): 0.123456789}
    assert named(found, "audio_weighted_noise_db") == {("mw-936", "a"): -60.5, ("lw-153", "bs468"): -70.0}
    assert not named(found, "modulation_negative_peak_ratio")


def test_the_next_reading_replaces_every_value_of_the_last() -> None:
    page = make_page()
    page.reading(reading({"carrier_level_dbfs": [-20.0, -30.0], "audio_silent": [1, 0]}))
    assert named(samples(page), "audio_silent") == {("mw-936",): 1, ("lw-153",): 0}
    page.reading(reading({"carrier_level_dbfs": [-21.0, np.nan]}))
    found = samples(page)
    assert named(found, "carrier_level_dbfs") == {("mw-936",): -21.0}
    assert not named(found, "audio_silent")


def test_an_invalid_reading_hides_what_needs_trust_and_names_its_faults() -> None:
    page = make_page()
    measured = {"modulation_negative_peak_ratio": [0.9, 0.8], "carrier_level_dbfs": [-20.0, -30.0]}
    page.reading(reading(measured, faults=[Fault.FADING | Fault.WEAK_SIGNAL, 0]))
    found = samples(page)
    assert named(found, "modulation_negative_peak_ratio") == {("lw-153",): 0.8}
    assert named(found, "carrier_level_dbfs") == {("mw-936",): -20.0, ("lw-153",): -30.0}
    assert named(found, "reading_valid") == {("mw-936",): 0, ("lw-153",): 1}
    raised = {key for key, value in named(found, "reading_fault").items() if value}
    assert raised == {("mw-936", "fading"), ("mw-936", "weak-signal")}
    assert measured["modulation_negative_peak_ratio"] == [0.9, 0.8]


def test_presence_lock_and_times_follow_each_moment() -> None:
    page = make_page()
    page.moment(moment(present=[1, 0], locked=[True, False], over_negative_s=[0.02, 0.0]))
    page.moment(
        moment(present=[1, 0], locked=[True, False], over_negative_s=[0.03, 0.0], over_positive_s=0.01)
    )
    page.moment(moment(present=[0, -1], locked=[False, False]))
    found = samples(page)
    assert named(found, "carrier_present") == {("mw-936",): 0, ("lw-153",): 0}
    assert named(found, "carrier_loop_locked") == {("mw-936",): 0, ("lw-153",): 0}
    assert named(found, "carrier_absent_seconds_total") == pytest.approx({("mw-936",): 0.1, ("lw-153",): 0.2})
    assert named(found, "overmodulation_seconds_total") == pytest.approx(
        {
            ("mw-936", "negative"): 0.05,
            ("mw-936", "positive"): 0.01,
            ("lw-153", "negative"): 0.0,
            ("lw-153", "positive"): 0.01,
        }
    )


def test_channels_in_another_order_reach_their_own_lines() -> None:
    page = make_page()
    page.moment(moment(channels=("lw-153", "mw-936"), present=[1, 0]))
    page.reading(reading({"carrier_level_dbfs": [-30.0]}, channels=("lw-153",)))
    found = samples(page)
    assert named(found, "carrier_present") == {("mw-936",): 0, ("lw-153",): 1}
    assert named(found, "carrier_level_dbfs") == {("lw-153",): -30.0}


def test_what_a_moment_says_is_not_said_twice_by_a_reading() -> None:
    present = Quantity("carrier_present", "", "Whether the carrier is there.", "house rule", flag=True)
    page = make_page(quantities=(*QUANTITIES, present))
    page.reading(reading({"carrier_present": [1, 1]}))
    page.moment(moment(present=[0, 1]))
    assert named(samples(page), "carrier_present") == {("mw-936",): 0, ("lw-153",): 1}


def test_an_event_is_counted_once_and_its_alarm_lasts_until_it_ends() -> None:
    page = make_page()
    page.event(event(1, "overmodulation-negative"))
    page.event(event(2, "carrier-loss", "lw-153"))
    found = samples(page)
    assert found["alarm_active", "mw-936", "overmodulation-negative"] == 1
    assert found["alarm_active", "lw-153", "carrier-loss"] == 1
    assert found["alarm_active", "lw-153", "overmodulation-negative"] == 0
    page.event(event(1, "overmodulation-negative", ended_s=12.8))
    page.event(event(2, "carrier-loss", "lw-153"))
    found = samples(page)
    assert found["alarm_active", "mw-936", "overmodulation-negative"] == 0
    assert found["alarm_active", "lw-153", "carrier-loss"] == 1
    assert found["events_total", "mw-936", "overmodulation-negative"] == 1
    assert found["overmodulation_events_total", "mw-936", "negative"] == 1
    assert found["overmodulation_events_total", "mw-936", "positive"] == 0
    assert found["carrier_loss_events_total", "lw-153"] == 1
    assert found["carrier_loss_events_total", "mw-936"] == 0


def test_an_alarm_stays_while_another_event_of_its_kind_is_open() -> None:
    page = make_page()
    page.event(event(1, "carrier-loss"))
    page.event(event(2, "carrier-loss"))
    page.event(event(1, "carrier-loss", ended_s=13.0))
    assert samples(page)["alarm_active", "mw-936", "carrier-loss"] == 1
    page.event(event(2, "carrier-loss", ended_s=14.0))
    assert samples(page)["alarm_active", "mw-936", "carrier-loss"] == 0


def test_events_of_the_source_have_families_of_their_own() -> None:
    page = make_page()
    page.event(event(1, "daemon-started", None, ended_s=12.3))
    page.event(event(2, "source-lost", None))
    found = samples(page)
    assert found["source_events_total", "daemon-started"] == 1
    assert found["source_events_total", "source-lost"] == 1
    assert found["source_alarm_active", "source-lost"] == 1
    page.event(event(2, "source-lost", None, ended_s=20.0))
    assert samples(page)["source_alarm_active", "source-lost"] == 0


@pytest.mark.parametrize(
    ("kind", "channel"), [("smoke", "mw-936"), ("source-lost", "mw-936"), ("carrier-loss", None)]
)
def test_an_unknown_kind_of_event_is_refused_by_name(kind: str, channel: str | None) -> None:
    with pytest.raises(ValueError, match=f"'{kind}'.*must be one of"):
        make_page().event(event(1, kind, channel))


def test_a_lost_source_never_looks_like_a_quiet_one() -> None:
    page = make_page()
    page.moment(moment())
    page.reading(reading({"carrier_level_dbfs": [-20.0, -30.0], "audio_silent": [0, 0]}, faults=[0, 2]))
    page.event(event(1, "carrier-loss", "lw-153"))
    page.source_lost()
    found = samples(page)
    assert found[("source_up",)] == 0
    for gone in ("carrier_level_dbfs", "audio_silent", "source_level_dbfs", "reading_fault"):
        assert not named(found, gone), gone
    for zero in ("carrier_present", "carrier_loop_locked", "reading_valid"):
        assert set(named(found, zero).values()) == {0}, zero
    assert found["carrier_loss_events_total", "lw-153"] == 1
    page.source_back()
    page.moment(moment())
    found = samples(page)
    assert found[("source_up",)] == 1
    assert found["carrier_present", "mw-936"] == 1
    assert not named(found, "carrier_level_dbfs")
    page.reading(reading({"carrier_level_dbfs": [-20.0, -30.0]}))
    assert named(samples(page), "carrier_level_dbfs") == {("mw-936",): -20.0, ("lw-153",): -30.0}


def test_source_and_daemon_numbers_are_those_of_the_tally_at_the_scrape() -> None:
    tally = full_tally()
    page = make_page(tally=tally)
    found = samples(page)
    assert found["build_info", "0.1.0"] == 1
    assert found[("source_up",)] == 1
    assert named(found, "source_lost_samples_total") == {("overflow",): 0, ("sequence",): 7}
    assert found["source_rejected_messages_total", "length"] == 0
    assert found[("source_level_dbfs",)] == -12.5
    assert found[("source_last_sample_timestamp_seconds",)] == 1_767_225_612.345
    assert found["stage_seconds_total", "detect"] == 1.5
    assert found["stage_failures_total", "CarrierMeter"] == 0
    assert found[("settings_last_reload_success",)] == 1
    tally.samples, tally.reconnects, tally.clipped, tally.busy_ratio = 960_000, 2, 3, float("nan")
    found = samples(page)
    assert found[("source_samples_total",)] == 960_000
    assert found[("source_reconnects_total",)] == 2
    assert found[("source_clipped_samples_total",)] == 3
    assert not named(found, "chain_busy_ratio")
