"""The alert rules and the scrape configuration, by Prometheus's own checker, and on a real page."""

import re
import shutil
import subprocess
from pathlib import Path

import pytest

from monitord.measure import QUANTITIES
from monitord.publish.metrics import MetricsPage
from monitord.publish.tally import Tally

FOLDER = Path(__file__).parents[2] / "config" / "prometheus"
PROMTOOL = shutil.which("promtool")
needs_promtool = pytest.mark.skipif(
    PROMTOOL is None, reason="promtool (Debian package prometheus) is not installed"
)


def promtool(*words: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [str(PROMTOOL), *words], cwd=FOLDER, capture_output=True, text=True, timeout=60, check=False
    )


@needs_promtool
@pytest.mark.parametrize(
    "words",
    [
        ("check", "rules", "monitord-rules.yml"),
        ("test", "rules", "monitord-rules-test.yml"),
        ("check", "config", "scrape.yml"),
    ],
    ids=" ".join,
)
def test_promtool_finds_nothing_wrong(words: tuple[str, ...]) -> None:
    done = promtool(*words)
    assert done.returncode == 0, done.stdout + done.stderr
    assert "SUCCESS" in done.stdout


def test_every_metric_in_the_rules_is_on_the_page() -> None:
    rules = (FOLDER / "monitord-rules.yml").read_text()
    named = set(re.findall(r"\bmonitord_\w+", rules))
    page = MetricsPage(["mw-936"], QUANTITIES, Tally(), "0").render(openmetrics=False).decode()
    on_page = {line.split("{")[0].split(" ")[0] for line in page.splitlines() if not line.startswith("#")}
    assert named
    assert named <= on_page


def test_every_alert_says_what_who_and_where_to_look() -> None:
    rules = (FOLDER / "monitord-rules.yml").read_text()
    alerts = rules.split("- alert: ")[1:]
    assert len(alerts) == 5
    for alert in alerts:
        for key in ("summary:", "description:", "runbook:", "severity:"):
            assert key in alert
