"""The Prometheus files of config/, judged by promtool."""

import re
import shutil
import subprocess
from pathlib import Path

import pytest

from monitord.notice.kinds import CHANNEL_KINDS
from tests.publish.pages import make_page, samples

FOLDER = Path(__file__).parents[2] / "config" / "prometheus"
RULES = (FOLDER / "monitord-rules.yml").read_text()


@pytest.fixture(scope="session")
def promtool() -> str:
    found = shutil.which("promtool")
    if found is None:
        pytest.skip("promtool is not installed (package prometheus)")
    return found


@pytest.mark.parametrize(
    "command",
    ["check rules monitord-rules.yml", "test rules monitord-rules-test.yml", "check config scrape.yml"],
)
def test_promtool_accepts_rules_their_tests_and_the_example(promtool: str, command: str) -> None:
    ran = subprocess.run([promtool, *command.split()], cwd=FOLDER, capture_output=True, text=True, timeout=30)
    assert ran.returncode == 0, ran.stdout + ran.stderr
    assert "SUCCESS" in ran.stdout


def test_a_rule_that_no_longer_fires_fails_its_test(promtool: str, tmp_path: Path) -> None:
    shutil.copytree(FOLDER, tmp_path, dirs_exist_ok=True)
    (tmp_path / "monitord-rules.yml").write_text(RULES.replace('alarm="carrier-loss"', 'alarm="other"'))
    ran = subprocess.run(
        [promtool, "test", "rules", "monitord-rules-test.yml"],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        timeout=30,
    )
    assert ran.returncode == 1
    assert "MonitordCarrierLost" in ran.stdout + ran.stderr


def test_each_rule_says_what_how_bad_and_what_to_do() -> None:
    rules = RULES.split("- alert: ")[1:]
    assert len(rules) == 5
    for rule in rules:
        for key in ("summary", "description", "severity", "runbook"):
            assert re.search(rf"^ +{key}: \S", rule, re.MULTILINE), f"{key} of {rule.splitlines()[0]}"


def test_each_rule_looks_at_what_the_page_has() -> None:
    """A rule on a name or an alarm that the page does not have would stay silent for ever."""
    on_page = {f"monitord_{key[0]}" for key in samples(make_page())}
    assert set(re.findall(r"\bmonitord_\w+", RULES)) <= on_page
    assert set(re.findall(r'alarm="([^"]+)"', RULES)) <= set(CHANNEL_KINDS)
