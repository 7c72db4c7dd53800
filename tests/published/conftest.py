"""Numbers that the checks against the world measure: shown with -v, and in a JUnit report."""

import pytest


@pytest.fixture
def measured(request):
    """Function that notes a line of measured numbers for the report."""

    def note(text):
        request.node.user_properties.append(("measured", text))

    return note


def pytest_terminal_summary(terminalreporter):
    """List what was measured, one line a test."""
    if terminalreporter.config.get_verbosity() < 1:
        return
    reports = [r for outcome in ("passed", "failed") for r in terminalreporter.getreports(outcome)]
    lines = [
        f"{report.nodeid.rpartition('::')[2]}: {text}"
        for report in reports
        if getattr(report, "when", "") == "call"
        for name, text in report.user_properties
        if name == "measured"
    ]
    if lines:
        terminalreporter.section("measured against the world")
        for line in lines:
            terminalreporter.write_line(line)
