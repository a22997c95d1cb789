"""The table that `replay` writes for people."""

import io

from monitord.blocks import Fault
from monitord.publish.table import Table
from monitord.quantities import Quantity
from tests.publish.given import LEVEL, OFFSET, PEAK, QUANTITIES, SILENT, event, moment, reading

VALUES = {
    "carrier_level_dbfs": [-20.123, -120.5],
    "carrier_frequency_offset_hertz": [0.0123, -3.25],
    "modulation_negative_peak_ratio": [0.955, float("nan")],
    "audio_silent": [1.0, 0.0],
}


def written(*, utc: float | None = 1_767_225_600.0) -> list[str]:
    out = io.StringIO()
    table = Table(QUANTITIES, out)
    table.moment(moment())
    table.reading(reading(VALUES, faults=[0, Fault.FADING], utc=utc))
    table.event(event(1, "carrier-loss"))
    table.event(event(1, "carrier-loss", ended_s=14.3))
    table.event(event(2, "overmodulation-negative", extreme=1.1))
    table.reading(reading(VALUES, index=19, utc=utc))
    table.finish({"readings": 4, "events": {}})
    return out.getvalue().splitlines()


def test_columns_stand_under_their_headings_with_units_and_depth_in_per_cent() -> None:
    lines = written()
    units = next(line for line in lines if "dBFS" in line)
    row = next(line for line in lines if "mw-936" in line and "-20.12" in line)
    for unit, cell in (("dBFS", "-20.12"), ("Hz", "0.012"), ("%", "95.5")):
        assert units.index(unit) + len(unit) == row.index(cell) + len(cell), unit
    assert row.split() == [
        "2026-01-01T00:00:01.000Z",
        "1.0",
        "mw-936",
        "-20.12",
        "0.012",
        "95.5",
        "yes",
        "ok",
    ]
    assert "channel" in units
    heading = " ".join(lines[: lines.index(units)])
    for word in ("carrier", "level", "offset", "peak", "silent"):
        assert word in heading


def test_a_missing_value_is_a_dash_and_faults_are_named() -> None:
    row = next(line for line in written() if "lw-153" in line)
    assert row.split()[3:] == ["-120.50", "-3.250", "-", "no", "fading"]


def test_events_are_lines_of_their_own_and_the_summary_is_last() -> None:
    lines = written()
    assert "* mw-936: carrier-loss at 12.300 s, for 2 s" in lines
    assert lines[-2] == "* mw-936: overmodulation-negative at 12.300 s, not over yet, extreme 110.0 %"
    assert lines[-1] == "summary: readings 4, events none"


def test_the_heading_comes_once_and_without_time_where_there_is_none() -> None:
    lines = written(utc=None)
    assert sum("dBFS" in line for line in lines) == 1
    assert not any("UTC" in line for line in lines)
    assert next(line for line in lines if "mw-936" in line).split()[:2] == ["1.0", "mw-936"]


def test_uncertainties_and_second_labels_are_left_to_the_other_formats() -> None:
    out = io.StringIO()
    uncertainty = Quantity("carrier_level_uncertainty_db", "dB", "Uncertainty.", "house rule")
    Table((LEVEL, OFFSET, PEAK, SILENT, uncertainty), out).reading(reading(VALUES))
    text = out.getvalue()
    assert "uncertainty" not in text
    assert "dB " not in text
