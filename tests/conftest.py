"""Rules that hold for every test: none is slow unmarked, none is skipped, none leaves a thread behind."""

import os
import threading
import time
from collections.abc import Callable, Generator, Iterator
from pathlib import Path

import hypothesis
import pytest

QUICK_S = 5.0  # what an unmarked test may take, so that the whole run is one that is waited for
THREAD_GRACE_S = 1.0  # a thread that was told to stop needs a moment to come to its end
RECORD_SUFFIXES = {".npz", ".wav"}  # beside them lie their descriptions

_FIGURES = pytest.StashKey[list[tuple[str, str]]]()
_WAITED = pytest.StashKey[float]()

# The same examples everywhere and every time: what failed on one computer fails on the next one too.
hypothesis.settings.register_profile("humbell", derandomize=True, deadline=None, database=None)
hypothesis.settings.load_profile("humbell")


def _records_folder() -> Path:
    beside = Path(__file__).resolve().parents[2] / "shared" / "records"
    return Path(os.environ.get("HUMBELL_RECORDS", beside))


def pytest_addoption(parser: pytest.Parser) -> None:
    """Add the option that lets the long tests in."""
    parser.addoption("--long", action="store_true", help="run the tests marked long, too")


def pytest_configure(config: pytest.Config) -> None:
    """Register the marker of the only tests that may be skipped."""
    config.addinivalue_line("markers", "records: needs the folder of records of measured machines")
    config.stash[_FIGURES] = []


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    """Deselect the long tests unless they were asked for; mark what uses the records."""
    for item in items:
        if "records" in getattr(item, "fixturenames", ()):
            item.add_marker("records")
    if config.getoption("--long"):
        return
    long = [item for item in items if item.get_closest_marker("long")]
    if long:
        config.hook.pytest_deselected(items=long)
        items[:] = [item for item in items if not item.get_closest_marker("long")]


@pytest.hookimpl(tryfirst=True)
def pytest_runtest_setup(item: pytest.Item) -> None:
    """Skip a test of the records where there are none, before its fixtures look for them."""
    if item.get_closest_marker("records") and not _records_folder().is_dir():
        pytest.skip(f"no records of measured machines in {_records_folder()}")


@pytest.hookimpl(wrapper=True, tryfirst=True)
def pytest_make_collect_report() -> Generator[None, pytest.CollectReport, pytest.CollectReport]:
    """Turn the skip of a whole file into an error."""
    report = yield
    if report.skipped:
        report.outcome = "failed"
        report.longrepr = _forbidden_skip(report.longrepr)
    return report


@pytest.hookimpl(wrapper=True)
def pytest_runtest_call(item: pytest.Item) -> Generator[None, object, object]:
    """Note how long the test stood in line for a processor."""
    before = _waited_s()
    try:
        return (yield)
    finally:
        item.stash[_WAITED] = _waited_s() - before


def _waited_s() -> float:
    """Return how long this thread was ready to run and another one did: on a busy computer that is not the test's."""
    try:
        return int(Path("/proc/thread-self/schedstat").read_text().split()[1]) / 1e9
    except (OSError, IndexError, ValueError):
        return 0.0


@pytest.hookimpl(wrapper=True, tryfirst=True)
def pytest_runtest_makereport(
    item: pytest.Item, call: pytest.CallInfo[None]
) -> Generator[None, pytest.TestReport, pytest.TestReport]:
    """Fail the test that was skipped without leave, and the slow one that is not marked."""
    report = yield
    may_skip = item.get_closest_marker("records") and not _records_folder().is_dir()
    if report.skipped and not hasattr(report, "wasxfail") and not may_skip:
        report.outcome = "failed"
        report.longrepr = _forbidden_skip(report.longrepr)
    may_be_slow = item.get_closest_marker("slow") or item.get_closest_marker("long")
    took_s = call.duration - item.stash.get(_WAITED, 0.0)
    if report.when == "call" and report.passed and took_s > QUICK_S and not may_be_slow:
        report.outcome = "failed"
        report.longrepr = (
            f"The test took {took_s:.1f} s, and {QUICK_S:g} s is the most for one without a mark "
            "(make it quicker, or mark it slow or long)."
        )
    return report


def _forbidden_skip(longrepr: object) -> str:
    # pytest's own form of a skip is (path, line, reason).
    reason = longrepr[2] if isinstance(longrepr, tuple) else longrepr
    return f"{reason}\nSkipping is forbidden: a test whose component is missing fails (install it)."


def pytest_terminal_summary(terminalreporter: pytest.TerminalReporter, config: pytest.Config) -> None:
    """Print the measured figures, and whether the records were there."""
    figures = config.stash[_FIGURES]
    if figures:
        terminalreporter.section("figures")
        for name, text in figures:
            terminalreporter.write_line(f"{name}: {text}")
    folder = _records_folder()
    if folder.is_dir():
        count = sum(path.suffix in RECORD_SUFFIXES for path in folder.rglob("*"))
        terminalreporter.write_line(f"records: {count} files of measured machines in {folder}")
    else:
        skipped = len(terminalreporter.stats.get("skipped", []))
        terminalreporter.write_line(f"records: folder absent, {skipped} tests skipped ({folder})")


@pytest.fixture(autouse=True)
def _no_thread_left() -> Iterator[None]:
    before = set(threading.enumerate())
    yield
    give_up = time.monotonic() + THREAD_GRACE_S
    while (left := set(threading.enumerate()) - before) and time.monotonic() < give_up:
        time.sleep(0.01)
    if left:
        names = ", ".join(sorted(thread.name for thread in left))
        pytest.fail(f"The test left threads behind: {names} (stop and join them).", pytrace=False)


@pytest.fixture(scope="session")
def records() -> Path:
    """Folder of records of measured machines; a test that asks for it is marked `records`."""
    return _records_folder()


@pytest.fixture
def figure(request: pytest.FixtureRequest) -> Callable[[str, str], None]:
    """Let a test report a measured figure: `figure("name", "text")` prints it at the end of the run."""

    def report(name: str, text: str) -> None:
        request.config.stash[_FIGURES].append((name, text))

    return report
