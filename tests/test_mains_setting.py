"""The mains frequency in the settings."""

import pytest

from monitord.errors import ConfigError
from monitord.settings import parse

CHANNEL = """
[source]
kind = "simulated"
[[channel]]
name = "a"
carrier_hz = 1_000
"""


@pytest.mark.parametrize(
    ("line", "value"), [("", "found"), ("mains_hz = 50", 50), ('mains_hz = "found"', "found")]
)
def test_the_mains_frequency_is_50_60_or_found(line: str, value: object) -> None:
    assert parse(CHANNEL + line, "s.toml").channels[0].mains_hz == value


@pytest.mark.parametrize("value", ["55", "50.2", '"50"', "true"])
def test_another_mains_frequency_is_refused_with_what_would_be_right(value: str) -> None:
    with pytest.raises(ConfigError) as caught:
        parse(f"{CHANNEL}mains_hz = {value}", "s.toml")
    (problem,) = caught.value.problems
    assert problem == f's.toml: channel[0].mains_hz = {value}: must be 50, 60 or "found"'
