"""Say at the end of a run whether ngspice itself was asked, or its committed results."""

import pytest

from tests.reference import ngspice


def pytest_terminal_summary(terminalreporter: pytest.TerminalReporter) -> None:
    if ngspice.used_committed:
        terminalreporter.write_line(
            f"ngspice is not installed: committed results stood in for {len(ngspice.used_committed)} runs of it"
        )
