"""Settings for all tests: own store, and in continuous integration a skipped test is a failure."""

import gc
import os

import pytest
from servers import ledger_store, running_server, server  # noqa: F401  fixtures for all tests


@pytest.fixture(autouse=True)
def _own_store(tmp_path, monkeypatch):
    """No test writes to the store of the folder it is run from, and none sees the user's settings."""
    for name in [name for name in os.environ if name.startswith("SERCHECK_") and name != "SERCHECK_NO_SKIPS"]:
        monkeypatch.delenv(name)
    monkeypatch.setenv("SERCHECK_STORE", str(tmp_path / "store"))


@pytest.hookimpl(trylast=True)
def pytest_sessionfinish(session, exitstatus):
    """Where nothing may be missing (``SERCHECK_NO_SKIPS``), a skipped test fails the run."""
    reporter = session.config.pluginmanager.get_plugin("terminalreporter")
    skipped = reporter.stats.get("skipped", []) if reporter else []
    if os.environ.get("SERCHECK_NO_SKIPS") and skipped and exitstatus == 0:
        reporter.write_line(f"{len(skipped)} tests were skipped although nothing may be missing here", red=True)
        session.exitstatus = pytest.ExitCode.TESTS_FAILED


def pytest_collection_finish() -> None:
    """Thousands of collected tests stay to the end: the garbage collector need not go through them again and again."""
    gc.collect()
    gc.freeze()
