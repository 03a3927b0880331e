"""A pytest plugin for CI: a test that was skipped, or a module that was not collected, fails the run.

Load it with `-p tests.no_skips`. `BANDLEDGER_ALLOWED_SKIPS` may hold exceptions, one a line: the beginning of the
test's id, a space, the reason. Tests that skip for want of a service then cannot go unnoticed where all services are.
"""

from __future__ import annotations

import os

import pytest


def allowed_prefixes(text: str) -> tuple[str, ...]:
    """The ids in the list; a line without a reason is refused."""
    prefixes = []
    for line in text.splitlines():
        if not line.strip():
            continue
        prefix, _, reason = line.strip().partition(" ")
        if not reason.strip():
            raise pytest.UsageError(f"BANDLEDGER_ALLOWED_SKIPS gives no reason for {prefix}")
        prefixes.append(prefix)
    return tuple(prefixes)


class NoSkips:
    def __init__(self, allowed: tuple[str, ...]) -> None:
        self.allowed = allowed
        self.unexpected: list[str] = []

    def _note(self, report: pytest.TestReport | pytest.CollectReport) -> None:
        if not report.skipped or hasattr(report, "wasxfail") or report.nodeid.startswith(self.allowed or ("\0",)):
            return
        reason = report.longrepr[2] if isinstance(report.longrepr, tuple) else str(report.longrepr)
        self.unexpected.append(f"{report.nodeid}: {reason}")

    def pytest_runtest_logreport(self, report: pytest.TestReport) -> None:
        self._note(report)

    def pytest_collectreport(self, report: pytest.CollectReport) -> None:
        self._note(report)

    @pytest.hookimpl(trylast=True)
    def pytest_sessionfinish(self, session: pytest.Session) -> None:
        if self.unexpected and session.exitstatus in (pytest.ExitCode.OK, pytest.ExitCode.NO_TESTS_COLLECTED):
            session.exitstatus = pytest.ExitCode.TESTS_FAILED

    def pytest_terminal_summary(self, terminalreporter) -> None:
        if self.unexpected:
            terminalreporter.section("skipped, which is not allowed in this run", red=True)
            for line in self.unexpected:
                terminalreporter.line(line)


def pytest_configure(config: pytest.Config) -> None:
    config.pluginmanager.register(NoSkips(allowed_prefixes(os.environ.get("BANDLEDGER_ALLOWED_SKIPS", ""))))
