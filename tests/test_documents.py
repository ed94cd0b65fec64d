"""The documents say what the code says."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from monitor.edges import metrics
from monitor.flow.alarms import TRANSITIONS
from monitor.flow.layout import KINDS, Signal

ROOT = Path(__file__).parents[1]


def generated(name: str) -> str:
    """Return the part of DEVELOPERS.md that is generated from the code."""
    text = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    found = re.search(rf"<!-- generated: {name} -->\n(.*?)<!-- end -->", text, re.DOTALL)
    assert found, name
    return found[1]


def test_the_table_of_metrics_is_the_code_s() -> None:
    assert generated("metrics").strip() == metrics.table().strip()


def test_the_table_of_alarm_states_is_the_code_s() -> None:
    rows = [f"| {before} | {what} | {after} |" for (before, what), after in TRANSITIONS.items()]
    assert generated("alarms") == "\n".join(["| from | happening | to |", "|---|---|---|", *rows]) + "\n"


@pytest.mark.parametrize("kind", KINDS)
def test_each_alarm_kind_is_in_the_readme(kind: str) -> None:
    assert f"| `{kind}` | {KINDS[kind]} |" in (ROOT / "README.md").read_text(encoding="utf-8")


def test_each_signal_fault_is_in_the_readme() -> None:
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    for fault in list(Signal)[1:]:
        assert f"`{fault.name.lower().replace('_', '-')}`" in text


def test_ci_calls_the_test_command_of_the_readme() -> None:
    command = "sh tests/run.sh"
    assert f"\n{command} " in (ROOT / "README.md").read_text(encoding="utf-8")
    assert (ROOT / ".ci" / "run").read_text(encoding="utf-8").rstrip().endswith(command)
