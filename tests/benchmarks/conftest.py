"""The figures of all measurements as one table at the end: every property that a measurement records is a row."""

from __future__ import annotations

from collections.abc import Callable
from time import process_time

import pytest


@pytest.hookimpl
def pytest_terminal_summary(terminalreporter: pytest.TerminalReporter) -> None:
    rows = [
        (report.nodeid.split("::")[-1].removeprefix("test_").replace("_", " "), name, str(value))
        for outcome in ("passed", "failed")
        for report in terminalreporter.getreports(outcome)
        if report.when == "call" and "tests/benchmarks/" in report.nodeid
        for name, value in report.user_properties
    ]
    if not rows:
        return
    wide, name_wide = (max(len(row[place]) for row in rows) for place in (0, 1))
    terminalreporter.write_sep("=", "figures")
    for words, name, value in rows:
        terminalreporter.write_line(f"{words:<{wide}}  {name:<{name_wide}}  {value}")


def least_ms(call: Callable[[], object], repeats: int = 30) -> float:
    """The least CPU time of a call on all threads, in milliseconds, after one call to warm up."""
    call()
    best = float("inf")
    for _ in range(repeats):
        begun = process_time()
        call()
        best = min(best, process_time() - begun)
    return 1e3 * best


Timer = Callable[..., float]


@pytest.fixture
def cpu_ms() -> Timer:
    return least_ms
