"""The writers of `replay`: JSON Lines and CSV."""

import csv
import io
import json
import math
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitord.blocks import Fault
from monitord.publish.lines import Csv, JsonLines, event_line, plain, rounded, timestamp
from tests.publish.given import QUANTITIES, event, moment, reading

VALUES = {
    "carrier_level_dbfs": [-20.123456789, float("nan")],
    "modulation_negative_peak_ratio": [0.9, float("inf")],
    "audio_silent": [1.0, 0.0],
    "audio_weighted_noise_db": [[-60.5, float("nan")], [-61.0, -62.0]],
}


def parsed(out: io.StringIO) -> list[dict[str, Any]]:
    def refuse(name: str) -> None:
        raise AssertionError(f"{name} is no JSON")

    return [json.loads(line, parse_constant=refuse) for line in out.getvalue().splitlines()]


def test_each_reading_and_channel_is_one_object_with_every_quantity() -> None:
    out = io.StringIO()
    JsonLines(QUANTITIES, out).reading(reading(VALUES, faults=[0, Fault.FADING | Fault.UNLOCKED]))
    first, second = parsed(out)
    assert first == {
        "time": "2026-01-01T00:00:01.000Z",
        "elapsed_s": 1.0,
        "channel": "mw-936",
        "valid": True,
        "faults": [],
        "carrier_level_dbfs": -20.12346,
        "carrier_frequency_offset_hertz": None,
        "modulation_negative_peak_ratio": 0.9,
        "audio_silent": 1,
        "audio_weighted_noise_db": {"a": -60.5, "bs468": None},
    }
    assert (second["channel"], second["valid"], second["faults"]) == ("lw-153", False, ["unlocked", "fading"])
    assert second["carrier_level_dbfs"] is None
    assert second["modulation_negative_peak_ratio"] is None
    assert type(first["audio_silent"]) is int
    assert list(first)[:5] == ["time", "elapsed_s", "channel", "valid", "faults"]


def test_a_recording_that_does_not_say_its_time_has_none() -> None:
    out = io.StringIO()
    JsonLines(QUANTITIES, out).reading(reading(VALUES, utc=None))
    assert [line["time"] for line in parsed(out)] == [None, None]


def test_an_event_is_written_where_it_closes_and_the_rest_at_the_end() -> None:
    out = io.StringIO()
    lines = JsonLines(QUANTITIES, out)
    lines.moment(moment())
    lines.event(event(1, "overmodulation-negative", extreme=1.05, limit=1.0))
    lines.event(event(2, "carrier-loss", "lw-153", extreme=-math.inf))
    assert out.getvalue() == ""
    lines.event(event(1, "overmodulation-negative", ended_s=12.8, extreme=1.1, limit=1.0, detail="reversal"))
    assert parsed(out) == [
        {
            "event": "overmodulation-negative",
            "channel": "mw-936",
            "started_s": 12.3,
            "ended_s": 12.8,
            "extreme": 1.1,
            "limit": 1.0,
            "detail": "reversal",
        }
    ]
    lines.event(event(2, "carrier-loss", "lw-153", extreme=-math.inf, detail="as it stands"))
    lines.finish({"readings": 2, "events": {"carrier-loss": 1}, "seconds": math.nan})
    open_event, summary = parsed(out)[1:]
    assert (open_event["event"], open_event["ended_s"], open_event["extreme"]) == ("carrier-loss", None, None)
    assert open_event["detail"] == "as it stands"
    assert summary == {"summary": {"readings": 2, "events": {"carrier-loss": 1}, "seconds": None}}


def test_csv_has_a_header_and_only_readings_and_tells_events_elsewhere() -> None:
    out, messages = io.StringIO(), io.StringIO()
    lines = Csv(QUANTITIES, out, messages)
    lines.moment(moment())
    lines.reading(reading(VALUES, faults=[0, Fault.FADING | Fault.UNLOCKED]))
    lines.event(event(1, "carrier-loss", ended_s=14.3, detail="no carrier"))
    lines.event(event(2, "source-lost", None))
    lines.finish({"readings": 2})
    rows = list(csv.DictReader(io.StringIO(out.getvalue())))
    assert len(rows) == 2
    assert rows[0] == {
        "time": "2026-01-01T00:00:01.000Z",
        "elapsed_s": "1.0",
        "channel": "mw-936",
        "valid": "1",
        "faults": "",
        "carrier_level_dbfs": "-20.12346",
        "carrier_frequency_offset_hertz": "",
        "modulation_negative_peak_ratio": "0.9",
        "audio_silent": "1",
        "audio_weighted_noise_db.a": "-60.5",
        "audio_weighted_noise_db.bs468": "",
    }
    assert (rows[1]["valid"], rows[1]["faults"]) == ("0", "unlocked fading")
    assert messages.getvalue().splitlines() == [
        "mw-936: carrier-loss at 12.300 s, for 2 s, no carrier",
        "source: source-lost at 12.300 s, not over yet",
        "summary: readings 2",
    ]


def test_a_person_reads_depth_in_per_cent_and_levels_as_they_are() -> None:
    over = event(1, "overmodulation-negative", ended_s=12.8, extreme=1.1, limit=1.0, detail="reversal")
    assert event_line(over) == (
        "mw-936: overmodulation-negative at 12.300 s, for 0.5 s, extreme 110.0 %, limit 100.0 %, reversal"
    )
    loss = event(1, "carrier-loss", extreme=-31.25, limit=-30.0)
    assert event_line(loss) == "mw-936: carrier-loss at 12.300 s, not over yet, extreme -31.25, limit -30"


def test_times_keep_their_milliseconds() -> None:
    assert timestamp(1_767_225_612.3456) == "2026-01-01T00:00:12.346Z"
    assert timestamp(1_767_225_599.99999) == "2026-01-01T00:00:00.000Z"
    assert timestamp(math.nan) is None


@given(st.floats())
@settings(max_examples=200)
def test_a_rounded_number_is_none_or_as_good_as_the_original(value: float) -> None:
    short = rounded(value)
    if math.isfinite(value):
        assert short is not None
        assert math.isclose(short, value, rel_tol=1e-6)
        assert abs(value) < 1e4 or abs(short - value) <= max(5.1e-4, 1e-12 * abs(value))
    else:
        assert short is None


def test_what_json_does_not_know_is_refused() -> None:
    with pytest.raises(TypeError, match="must be a number, text, list or mapping"):
        plain({"when": object()})
