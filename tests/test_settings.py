"""Settings: what is right is taken, what is wrong is told, all of it at once, by key, value and remedy."""

import copy
import json
import socket
import tomllib
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import ValidationError

from monitord.errors import ConfigError
from monitord.settings import DETECTORS, Channel, Settings, Source, built_in, check_span, load, parse
from monitord.settings.models import quoted

CONFIG = Path(__file__).parent.parent / "config"

SOCKET = """
[source]
kind = "socket"
endpoint = "tcp://127.0.0.1:5555"
sample_rate_hz = 48_000
datatype = "cf32_le"
center_hz = 930_000
"""
CHANNEL = """
[[channel]]
name = "a"
carrier_hz = 936_000
"""
RASTER = """
[[raster]]
first_hz = 918_000
last_hz = 942_000
step_hz = 9_000
name = "mw-{khz}"
"""
SIMULATED = '[source]\nkind = "simulated"\n'


def problems(text: str, recording: str | None = None) -> tuple[str, ...]:
    with pytest.raises(ConfigError) as caught:
        parse(text, "s.toml", recording=recording)
    assert all(line.startswith("s.toml: ") and "\n" not in line for line in caught.value.problems)
    return tuple(line.removeprefix("s.toml: ") for line in caught.value.problems)


def only_problem(text: str, recording: str | None = None) -> str:
    (line,) = problems(text, recording)
    return line


def source_with(line: str) -> str:
    """The socket's settings with one key of [source] set otherwise."""
    key = line.split(" = ")[0]
    kept = [one for one in SOCKET.splitlines() if not one.startswith(f"{key} = ")]
    return "\n".join([*kept, line, CHANNEL])


def channel_with(lines: str) -> str:
    return SOCKET + CHANNEL + lines


# What is right


@pytest.mark.parametrize("path", sorted(CONFIG.glob("*.toml")), ids=lambda path: path.stem)
def test_every_example_is_valid(path: Path) -> None:
    assert load(path).channels


def test_there_is_an_example_for_each_kind_of_source() -> None:
    kinds = {load(path).source.kind for path in CONFIG.glob("*.toml")}
    assert kinds == {"socket", "recording", "simulated"}


def test_commented_keys_of_the_socket_example_show_the_defaults() -> None:
    shown = (CONFIG / "socket.toml").read_text()
    text = "\n".join(
        line.removeprefix("# ") if " = " in line or "# [" in line else line for line in shown.splitlines()
    )
    left_out = ("topic", "reference_level_dbfs", "directory")
    text = "\n".join(line for line in text.splitlines() if not line.startswith(left_out))
    assert parse(text, "example") == load(CONFIG / "socket.toml")
    assert len(tomllib.loads(text)["channel"][0]) > 12


def test_defaults_are_those_of_the_interface(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv("STATE_DIRECTORY", raising=False)
    got = parse(SOCKET + CHANNEL, "s.toml")
    channel = got.channels[0]
    assert (channel.bandwidth_hz, channel.emission_bandwidth_hz, channel.acquire_hz) == (
        5000.0,
        5000.0,
        100.0,
    )
    assert (channel.detector, channel.expect, channel.depth_reference) == (
        "synchronous",
        "carrier",
        "present",
    )
    assert (channel.loop_bandwidth_hz, channel.carrier_average_s, channel.carrier_control) == (
        5.0,
        1.0,
        False,
    )
    assert (channel.present_c_n0_dbhz, channel.loss_drop_db, channel.loss_after_s) == (35.0, 10.0, 0.5)
    assert channel.reference_level_dbfs is None
    limits = channel.limits
    assert (limits.negative_peak, limits.positive_peak, limits.hold_s) == (1.0, 1.25, 0.2)
    source = got.source
    assert (source.pattern, source.attach, source.framing, source.topic) == ("sub", "connect", "bare", None)
    assert (source.gain, source.remove_dc, source.pace) == ("fixed", False, "real-time")
    assert got.station.name == socket.gethostname()
    assert got.http.listen == "127.0.0.1:9560"
    assert got.journal.directory is None


def test_whole_numbers_are_taken_where_a_number_is_wanted() -> None:
    got = parse(channel_with("bandwidth_hz = 4500"), "s.toml").channels[0].bandwidth_hz
    assert isinstance(got, float)
    assert got == 4500.0


def test_emission_bandwidth_follows_the_measured_one_unless_set() -> None:
    assert Channel(name="a", carrier_hz=0, bandwidth_hz=4500).emission_bandwidth_hz == 4500.0
    wide = Channel(name="a", carrier_hz=0, bandwidth_hz=4500, emission_bandwidth_hz=9000)
    assert wide.emission_bandwidth_hz == 9000.0


def test_settings_cannot_be_changed() -> None:
    channel = parse(SOCKET + CHANNEL, "s.toml").channels[0]
    with pytest.raises(ValidationError, match="frozen"):
        channel.bandwidth_hz = 1.0


def test_journal_defaults_to_the_first_state_directory(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("STATE_DIRECTORY", "/var/lib/one:/var/lib/two")
    assert parse(SOCKET + CHANNEL, "s.toml").journal.directory == "/var/lib/one"
    written = parse(SOCKET + CHANNEL + '[journal]\ndirectory = "/srv/log"', "s.toml")
    assert written.journal.directory == "/srv/log"


def test_a_simulated_source_needs_nothing_and_brings_its_own_channels() -> None:
    got = parse(SIMULATED, "s.toml")
    assert got.channels == built_in().channels
    assert len(got.channels) >= 2
    assert (got.source.sample_rate_hz, got.source.center_hz) == (48_000.0, 0.0)
    assert check_span(got, 48_000.0, 0.0, False) == ()


@pytest.mark.parametrize("endpoint", ["tcp://receiver.example:5555", "tcp://[::1]:5555", "ipc:///run/iq"])
def test_endpoints_of_each_form_are_taken(endpoint: str) -> None:
    assert parse(source_with(f'endpoint = "{endpoint}"'), "s.toml").source.endpoint == endpoint


@pytest.mark.parametrize("listen", ["127.0.0.1:0", "[::1]:9560", "localhost:65535"])
def test_addresses_of_each_form_are_taken(listen: str) -> None:
    assert parse(SOCKET + CHANNEL + f'[http]\nlisten = "{listen}"', "s.toml").http.listen == listen


def test_described_messages_may_say_datatype_and_centre_themselves() -> None:
    text = '[source]\nkind = "socket"\nendpoint = "ipc:///run/iq"\nsample_rate_hz = 48e3\nframing = "described"\n'
    got = parse(text + CHANNEL, "s.toml")
    assert got.source.datatype is None
    assert got.source.real is None


# Rasters


def test_a_raster_gives_its_channels_in_carrier_order() -> None:
    channels = parse(SOCKET + RASTER + "bandwidth_hz = 4_500", "s.toml").channels
    assert [channel.name for channel in channels] == ["mw-918", "mw-927", "mw-936"]
    assert [channel.carrier_hz for channel in channels] == [918e3, 927e3, 936e3]
    assert {channel.bandwidth_hz for channel in channels} == {4500.0}


def test_a_raster_includes_its_last_carrier_even_with_a_broken_step() -> None:
    text = (
        SIMULATED
        + '[[raster]]\nfirst_hz = -10_000\nlast_hz = 15_000\nstep_hz = 8_333.333_333_333_334\nname = "x{khz}"'
    )
    assert [channel.name for channel in parse(text, "s.toml").channels] == [
        "x-10",
        "x-1.66667",
        "x6.66667",
        "x15",
    ]


def test_a_channel_of_the_same_name_stands_in_its_rasters_place() -> None:
    own = '[[channel]]\nname = "mw-927"\ncarrier_hz = 927_010\ndetector = "envelope"\n'
    channels = parse(SOCKET + CHANNEL + own + RASTER, "s.toml").channels
    assert [channel.name for channel in channels] == ["a", "mw-918", "mw-927", "mw-936"]
    assert (channels[2].carrier_hz, channels[2].detector) == (927_010.0, "envelope")


def test_a_raster_beyond_the_span_is_told_once_for_each_end() -> None:
    text = SOCKET + RASTER.replace("918_000", "801_000").replace("942_000", "1_098_000")
    first, last = problems(text)
    assert first.startswith("raster[0].first_hz = 801000: must be from 911100 to 948900 Hz")
    assert last.startswith("raster[0].last_hz = 1098000: must be from 911100 to 948900 Hz")


@pytest.mark.parametrize(
    ("change", "expected"),
    [
        (("942_000", "900_000"), "raster[0].last_hz = 900000: must be at least first_hz (918000)"),
        (("9_000", "0"), "raster[0].step_hz = 0: must be more than 0 Hz"),
        (
            ("9_000", "10"),
            "raster[0].step_hz = 10: must be more than 12 Hz: at most 2000 channels are possible",
        ),
        (("mw-{khz}", "mw"), 'raster[0].name = "mw": gives "mw" twice; it must tell the carriers apart'),
        (("mw-{khz}", "mw {mhz}"), 'raster[0].name = "mw {mhz}": must be 1 to 64 letters'),
        (('name = "mw-{khz}"', ""), 'raster[0].name: missing; must be a pattern: "mw-{khz}"'),
    ],
)
def test_a_wrong_raster_is_told_by_its_key(change: tuple[str, str], expected: str) -> None:
    assert only_problem(SOCKET + RASTER.replace(*change)).startswith(expected)


def test_a_raster_whose_names_do_not_fit_says_which() -> None:
    text = SIMULATED + '[[raster]]\nfirst_hz = -9_000\nlast_hz = 9_000\nstep_hz = 9_000\nname = "{khz}"'
    assert only_problem(text).startswith('raster[0].name = "{khz}": gives "-9"; a channel\'s name must be')


def test_two_rasters_may_not_give_the_same_name() -> None:
    line = only_problem(SOCKET + RASTER + RASTER)
    assert line == 'raster[1].name = "mw-{khz}": gives "mw-918", which another raster gives too'


def test_more_channels_than_possible_are_refused_in_sum() -> None:
    rasters = "".join(
        f'[[raster]]\nfirst_hz = 900_000\nlast_hz = 911_990\nstep_hz = 10\nname = "{letter}{{khz}}"\n'
        for letter in "ab"
    )
    text = source_with("sample_rate_hz = 1_000_000").replace(CHANNEL, "") + rasters
    assert only_problem(text) == "channel: 2400 channels in all; must be at most 2000"


# What is wrong


def test_a_file_of_many_mistakes_tells_all_of_them_in_one_run() -> None:
    text = """
    colour = "red"
    [station]
    name = 7
    [source]
    kind = "socket"
    sample_rate_hz = 48_000
    center_hz = 930_000
    datatype = "cf32"
    pattern = "push"
    wiring = "iq"
    [[channel]]
    name = "a"
    carrier_hz = 936_000
    bandwith_hz = 5_000
    detector = "magic"
    [[channel]]
    name = "a"
    carrier_hz = 990_000
    bandwidth_hz = true
    [channel.limits]
    negative_peak = 3
    [[channel]]
    carrier_hz = nan
    carrier_control = 1
    [[raster]]
    first_hz = 2
    last_hz = 1
    step_hz = -9
    name = "r-{khz}"
    [http]
    listen = "9560"
    """
    lines = problems(text)
    expected = [
        'colour = "red": unknown key; known here: station, source, channel, raster, http, journal',
        "station.name = 7: must be text in quotes",
        'source.datatype = "cf32": must be one of "cf32_le"',
        'source.pattern = "push": must be "sub" or "pull"',
        'source.wiring = "iq": belongs to kind = "soundcard" or "recording", not to "socket"; leave it out',
        'source.endpoint: missing; must be "tcp://host:port" or "ipc://path"',
        "channel[0].bandwith_hz = 5000: unknown key; did you mean bandwidth_hz?",
        'channel[0].detector = "magic": must be one of the detectors of this version: "synchronous", "envelope"',
        "channel[1].bandwidth_hz = true: must be a number",
        "channel[1].limits.negative_peak = 3: must be more than 0 and at most 2",
        'channel[1].name = "a": is the name of channel[0] too; must be a name of its own',
        "channel[2].name: missing; must be 1 to 64 letters",
        "channel[2].carrier_hz = nan: must be a finite number",
        "channel[2].carrier_control = 1: must be true or false",
        "raster[0].step_hz = -9: must be more than 0 Hz",
        "raster[0].last_hz = 1: must be at least first_hz (2)",
        'http.listen = "9560": must be "host:port"',
    ]
    missing = [start for start in expected if not any(line.startswith(start) for line in lines)]
    assert missing == []
    assert len(lines) == len(expected)


def test_a_wrong_value_does_not_hide_what_depends_on_the_others() -> None:
    lines = problems(
        SOCKET + '[[channel]]\nname = "a"\ncarrier_hz = 990_000\nacquire_hz = 50\ndetector = "x"'
    )
    assert [line.split(" = ")[0] for line in lines] == ["channel[0].detector", "channel[0].carrier_hz"]


@pytest.mark.parametrize(
    ("line", "expected"),
    [
        ('kind = "soundcard"', "this version cannot use a sound card yet"),
        ('kind = "tape"', 'must be one of "socket", "recording", "simulated"'),
        ("sample_rate_hz = 999", "must be from 1000 to 50000000 Hz"),
        ("sample_rate_hz = 50_000_001", "must be from 1000 to 50000000 Hz"),
        ("sample_rate_hz = inf", "must be a finite number"),
        ('sample_rate_hz = "48k"', "must be a number"),
        ("center_hz = false", "must be a number"),
        ('gain = "agc"', 'must be "fixed" or "automatic"'),
        ("remove_dc = true", "is not available in this version"),
        ('endpoint = "inproc://x"', 'must be "tcp://host:port" or "ipc://path"'),
        ('endpoint = "tcp://127.0.0.1"', 'must be "tcp://host:port" or "ipc://path"'),
        ('endpoint = "tcp://127.0.0.1:65536"', 'must be "tcp://host:port" or "ipc://path"'),
        ('endpoint = "tcp://*:5555"', 'must name a host and a port (not 0) with attach = "connect"'),
        ('path = "x.wav"', 'belongs to kind = "recording", not to "socket"; leave it out'),
        ('device = "Rx"', 'belongs to kind = "soundcard", not to "socket"; leave it out'),
    ],
)
def test_a_wrong_source_is_told_by_its_key(line: str, expected: str) -> None:
    key, value = line.replace("_000", "000").replace("_001", "001").split(" = ")
    assert only_problem(source_with(line)).startswith(f"source.{key} = {value}: {expected}")


@pytest.mark.parametrize("key", ["endpoint", "sample_rate_hz", "datatype", "kind"])
def test_a_missing_key_of_the_source_is_named(key: str) -> None:
    kept = "\n".join(line for line in SOCKET.splitlines() if not line.startswith(key))
    assert only_problem(kept + CHANNEL).startswith(f"source.{key}: missing; must be ")


def test_a_topic_is_refused_where_it_has_no_meaning() -> None:
    text = SOCKET + 'pattern = "pull"\ntopic = "iq"\n' + CHANNEL
    assert only_problem(text) == 'source.topic = "iq": serves pattern = "sub" only; leave it out'


@pytest.mark.parametrize(
    ("line", "expected"),
    [
        ("bandwidth_hz = 99", "must be at least 100 Hz"),
        ("emission_bandwidth_hz = 4_000", "must be at least bandwidth_hz: 5000 Hz"),
        ("acquire_hz = -1", "must be at least 0 Hz"),
        ("loop_bandwidth_hz = 0.4", "must be from 0.5 to 20 Hz"),
        ("carrier_average_s = 11", "must be from 0.1 to 10 s"),
        ("reference_level_dbfs = 21", "must be from -200 to 20 dBFS"),
        ("loss_drop_db = 0", "must be more than 0 and at most 100 dB"),
        ("loss_after_s = -1", "must be from 0 to 3600 s"),
        ('expect = "silence"', 'must be "carrier", "none" or "any"'),
        ('depth_reference = "absent"', 'must be "present" or "unmodulated"'),
        ('detector = "magic"', f"must be one of the detectors of this version: {quoted(DETECTORS)}"),
        ("time_constant_s = 0", "must be from 1e-06 to 0.1 s"),
        ("limits = 3", "must be a table"),
        ('limits = {hold_s = "x"}', "must be a number"),
        ("limits = {hold = 1}", "unknown key; did you mean hold_s?"),
    ],
)
def test_a_wrong_key_of_a_channel_is_told(line: str, expected: str) -> None:
    got = only_problem(channel_with(line))
    assert got.startswith(f"channel[0].{line.split(' = ')[0]}")
    assert got.endswith(expected)


@pytest.mark.parametrize("name", ["", "-a", "a b", "a\\n", "ä", "x" * 65])
def test_a_name_that_is_no_label_is_refused(name: str) -> None:
    line = only_problem(SOCKET + f'[[channel]]\nname = "{name}"\ncarrier_hz = 936_000')
    assert line.startswith("channel[0].name = ")


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        (SOCKET, "channel: missing; must be at least one [[channel]] or [[raster]]"),
        (SOCKET + "[channel]\nname = 'a'", "channel = {...}: must be a table in an array: write [[channel]]"),
        ("source = 1\n" + CHANNEL, "source = 1: must be a table"),
        (CHANNEL, "source: missing; must be a section [source] that says at least its kind"),
        (
            SOCKET + CHANNEL + "[[notice]]",
            "notice: this version cannot send notices yet; leave [[notice]] out",
        ),
        (SOCKET + CHANNEL + "[jurnal]", "jurnal = {...}: unknown key; did you mean journal?"),
        ("channel = [1]\n" + SIMULATED, "channel[0] = 1: must be a table"),
        ('"a\\nb" = 1\n' + SIMULATED, '"a\\nb" = 1: unknown key; known here: '),
    ],
)
def test_a_wrong_shape_of_the_file_is_told(text: str, expected: str) -> None:
    assert only_problem(text).startswith(expected)


@pytest.mark.parametrize(
    "text", ["[source\n", "a = 1\na = 2", "a = " + "[" * 5000, "a = " + "9" * 5000, "\ufeffa = 1"]
)
def test_what_is_no_toml_is_told_in_one_line(text: str) -> None:
    only_problem(text)


def test_a_syntax_error_says_line_and_column() -> None:
    assert "(at line 3, column 8)" in only_problem("a = 1\n\nkind = sub\n")


def test_a_file_that_cannot_be_read_is_told(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match=r"missing\.toml: cannot be read: No such file or directory"):
        load(tmp_path / "missing.toml")
    (tmp_path / "latin.toml").write_bytes(b'[station]\nname = "\xe4"')
    with pytest.raises(ConfigError, match=r"latin\.toml: byte 18 is not UTF-8"):
        load(tmp_path / "latin.toml")


# The source's span


@pytest.mark.parametrize("carrier_hz", [911_100, 948_900])
def test_a_channel_at_the_very_edge_of_the_span_is_taken(carrier_hz: int) -> None:
    assert parse(SOCKET + CHANNEL.replace("936_000", str(carrier_hz)), "s.toml").channels


@pytest.mark.parametrize("carrier_hz", [911_099, 948_901])
def test_a_channel_just_outside_the_span_is_told(carrier_hz: int) -> None:
    line = only_problem(SOCKET + CHANNEL.replace("936_000", str(carrier_hz)))
    assert line.startswith(f"channel[0].carrier_hz = {carrier_hz}: must be from 911100 to 948900 Hz")


def test_a_bandwidth_that_no_carrier_could_have_is_told_as_such() -> None:
    line = only_problem(channel_with("bandwidth_hz = 90_000"))
    assert line == (
        "channel[0].bandwidth_hz = 90000: must be at most 23900 Hz:"
        " half of the source's sample rate (48000 Hz) less acquire_hz (100 Hz)"
    )
    assert only_problem(channel_with("acquire_hz = 30_000")).startswith(
        "channel[0].acquire_hz = 30000: must be at most 23900 Hz"
    )


@pytest.mark.parametrize(
    ("carrier_hz", "right"), [(5_100, False), (5_101, True), (18_900, True), (18_901, False)]
)
def test_a_real_if_reaches_from_zero_to_half_the_rate(carrier_hz: int, right: bool) -> None:
    text = SOCKET.replace("cf32", "rf32").replace("930_000", "0") + CHANNEL.replace(
        "936_000", str(carrier_hz)
    )
    if right:
        assert parse(text, "s.toml").source.real
    else:
        assert only_problem(text).startswith(
            f"channel[0].carrier_hz = {carrier_hz}: must be above 5100 and at most 18900 Hz"
        )


def test_a_real_if_has_no_centre() -> None:
    text = SOCKET.replace("cf32", "rf32") + CHANNEL.replace("936_000", "12_000")
    assert only_problem(text).startswith("source.center_hz = 930000: must be 0 or left out for a real IF")


def test_built_in_channels_outside_a_span_of_ones_own_are_told() -> None:
    assert only_problem(SIMULATED + "center_hz = 930_000").startswith(
        "channel: missing; the built-in channels do not lie inside the source's span"
    )


def test_channels_are_checked_once_the_span_is_known() -> None:
    got = parse('[[channel]]\nname = "a"\ncarrier_hz = 936_000', "s.toml", recording="x.sigmf-meta")
    assert check_span(got, 48_000.0, 930_000.0, False) == ()
    (line,) = check_span(got, 48_000.0, 0.0, False)
    assert line.startswith('channel "a".carrier_hz = 936000: must be from -18900 to 18900 Hz')
    assert len(check_span(got, 48_000.0, 0.0, True)) == 1
    (line,) = check_span(got, 100.0, 0.0, False)
    assert line == "sample rate = 100: must be at least 1000 samples per second"


# Settings for recordings


def test_the_named_recording_is_the_source() -> None:
    got = parse(CHANNEL, "s.toml", recording="x.wav").source
    assert (got.kind, got.path, got.pace) == ("recording", "x.wav", "flat-out")
    assert (got.sample_rate_hz, got.center_hz, got.real) == (None, None, None)


def test_the_daemons_settings_serve_for_a_recording_too(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("STATE_DIRECTORY", "/var/lib/monitord")
    ignored = '[http]\nlisten = "here"\n[journal]\ndirectory = "/srv"\n[[notice]]\nto = "x"\n'
    got = parse(source_with('gain = "automatic"') + ignored, "s.toml", recording="x.wav")
    assert (got.source.kind, got.source.endpoint, got.source.datatype) == ("recording", None, None)
    assert (got.source.gain, got.source.center_hz) == ("automatic", 930_000.0)
    assert got.journal.directory is None
    assert got.http.listen == "127.0.0.1:9560"


def test_a_partial_source_says_what_the_recording_does_not() -> None:
    got = parse(
        '[source]\nwiring = "left"\ndatatype = "ri16_le"\n' + CHANNEL, "s.toml", recording="x.wav"
    ).source
    assert (got.wiring, got.datatype, got.real) == ("left", "ri16_le", True)


@pytest.mark.parametrize(
    ("text", "key"),
    [
        ("[source]\nwirring = 'iq'\n" + CHANNEL, "source.wirring"),
        ("[source]\nendpoint = 'ipc:///x'\n" + CHANNEL, "source.endpoint"),
        ("[source]\nsample_rate_hz = 48_000\ncenter_hz = 0\n" + CHANNEL, "channel[0].carrier_hz"),
        ("[source]\ncenter_hz = 0\n", "channel: missing"),
    ],
)
def test_settings_for_a_recording_are_checked_as_far_as_they_go(text: str, key: str) -> None:
    assert only_problem(text, recording="x.wav").startswith(key)


# Anything at all

RIGHT = tomllib.loads(SOCKET + CHANNEL + RASTER + "[http]\n[journal]\n[station]")
KEYS = sorted(
    {*Channel.model_fields, *Source.model_fields, "first_hz", "last_hz", "step_hz", "listen", "directory"}
)
TABLES = ("source", "channel", "raster", "http", "journal", "station")
VALUES = st.one_of(
    st.booleans(),
    st.floats(),
    st.integers(),
    st.sampled_from(
        (10**400, -(10**400), 1e308, -1e308, 5e-324, 0, 1000, [], [[1], "x"], {}, {"hold_s": -1}, {"": {}})
    ),
    st.sampled_from(
        ("socket", "recording", "simulated", "soundcard", "iq", "left", "tcp://a:1", "{khz}", "rf32_le")
    ),
    st.text(st.characters(exclude_categories=["Cs"]), max_size=8),
)


def toml(value: object) -> str:
    """A value in TOML's inline form."""
    if isinstance(value, dict):
        return "{" + ", ".join(f"{toml(key)} = {toml(inner)}" for key, inner in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(map(toml, value)) + "]"
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    return str(value).lower()


def assert_settings_or_problems(text: str, recording: str | None) -> None:
    try:
        got = parse(text, "s.toml", recording=recording)
    except ConfigError as error:
        assert error.problems
        assert all("\n" not in line for line in error.problems)
    else:
        assert isinstance(got, Settings)


@settings(max_examples=100)
@given(st.text(), st.sampled_from((None, "x.wav")))
def test_any_text_gives_settings_or_problems(text: str, recording: str | None) -> None:
    assert_settings_or_problems(text, recording)


@settings(max_examples=200)
@given(
    st.lists(st.tuples(st.sampled_from(TABLES), st.sampled_from(KEYS), VALUES), max_size=6),
    st.dictionaries(st.sampled_from(TABLES), VALUES, max_size=1),
    st.sampled_from((None, "x.wav")),
)
def test_any_values_give_settings_or_problems(
    changes: list[tuple[str, str, object]], sections: dict[str, object], recording: str | None
) -> None:
    document = copy.deepcopy(RIGHT)
    for table, key, value in changes:
        place = document[table][0] if table in ("channel", "raster") else document[table]
        place[key] = value
    text = "\n".join(f"{key} = {toml(value)}" for key, value in (document | sections).items())
    assert_settings_or_problems(text, recording)
