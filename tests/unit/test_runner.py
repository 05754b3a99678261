"""The rules of tests/conftest.py, each tried on a small test run of its own."""

import threading
from pathlib import Path

import pytest

pytest_plugins = ["pytester"]

REPOSITORY = Path(__file__).resolve().parents[2]


class SlowCalls:
    """Makes every test call look as if it had taken *seconds*, without waiting for them."""

    def __init__(self, seconds: float) -> None:
        self.seconds = seconds

    @pytest.hookimpl(tryfirst=True)
    def pytest_runtest_makereport(self, call: pytest.CallInfo[None]) -> None:
        """Change what was measured before the report is made of it."""
        call.duration = self.seconds


class Held:
    """Gives a test an event that stays unset while that test and its teardown run."""

    def __init__(self) -> None:
        self.event = threading.Event()

    @pytest.fixture
    def held(self) -> threading.Event:
        """Return the event."""
        return self.event


@pytest.fixture
def run(pytester: pytest.Pytester, monkeypatch: pytest.MonkeyPatch) -> pytest.Pytester:
    """A folder with this project's conftest.py and pytest settings, and no records."""
    pytester.makeconftest((REPOSITORY / "tests" / "conftest.py").read_text())
    pytester.makepyprojecttoml((REPOSITORY / "pyproject.toml").read_text())
    monkeypatch.setenv("HUMBELL_RECORDS", str(pytester.path / "records"))
    return pytester


def test_a_slow_test_without_a_mark_fails(run: pytest.Pytester) -> None:
    """A call of more than five seconds fails unless the test is marked slow or long; the message says so."""
    path = run.makepyfile(
        """
        import pytest

        def test_unmarked() -> None:
            pass

        @pytest.mark.slow
        def test_slow() -> None:
            pass

        @pytest.mark.long
        def test_long() -> None:
            pass
        """
    )
    result = run.runpytest_inprocess(path, "--long", plugins=[SlowCalls(5.1)])
    result.assert_outcomes(passed=2, failed=1)
    result.stdout.fnmatch_lines(["*test_unmarked*", "The test took 5.1 s*mark it slow or long*"])


def test_a_test_of_five_seconds_passes(run: pytest.Pytester) -> None:
    """Five seconds are allowed, more are not."""
    path = run.makepyfile("def test_unmarked() -> None: pass")
    run.runpytest_inprocess(path, plugins=[SlowCalls(5.0)]).assert_outcomes(passed=1)


def test_long_tests_are_deselected_unless_asked_for(run: pytest.Pytester) -> None:
    """Without --long a long test counts as deselected, not as skipped; with it, it runs."""
    path = run.makepyfile(
        """
        import pytest

        def test_short() -> None:
            pass

        @pytest.mark.long
        def test_long() -> None:
            pass
        """
    )
    run.runpytest_inprocess(path).assert_outcomes(passed=1, deselected=1)
    run.runpytest_inprocess(path, "--long").assert_outcomes(passed=2)


def test_a_skipped_test_fails(run: pytest.Pytester) -> None:
    """A skip is a failure with its reason, whether by a mark, by a fixture or in the test itself."""
    path = run.makepyfile(
        """
        import pytest

        @pytest.fixture
        def broker() -> None:
            pytest.skip("no broker")

        def test_by_itself() -> None:
            pytest.skip("no database")

        def test_by_a_fixture(broker: None) -> None:
            pass

        @pytest.mark.skipif(True, reason="no browser")
        def test_by_a_mark() -> None:
            pass
        """
    )
    result = run.runpytest_inprocess(path)
    result.assert_outcomes(failed=1, errors=2)
    for reason in ("no broker", "no database", "no browser"):
        result.stdout.fnmatch_lines([f"*{reason}", "Skipping is forbidden*"])


def test_a_skipped_file_fails(run: pytest.Pytester) -> None:
    """A file that skips itself while it is read is an error of the run."""
    path = run.makepyfile("import pytest; pytest.importorskip('a_component_that_is_nowhere')")
    result = run.runpytest_inprocess(path)
    result.assert_outcomes(errors=1)
    result.stdout.fnmatch_lines(["*a_component_that_is_nowhere*", "Skipping is forbidden*"])


def test_a_thread_left_behind_fails_the_test(run: pytest.Pytester) -> None:
    """A thread that outlives its test fails it and is named, a daemon thread like any other."""
    path = run.makepyfile(
        """
        import threading

        def test_leaves_one(held: threading.Event) -> None:
            threading.Thread(target=held.wait, name="left-over", daemon=True).start()

        def test_joins_it() -> None:
            thread = threading.Thread(target=int)
            thread.start()
            thread.join()
        """
    )
    held = Held()
    try:
        result = run.runpytest_inprocess(path, plugins=[held])
    finally:
        held.event.set()
    result.assert_outcomes(passed=2, errors=1)
    result.stdout.fnmatch_lines(["*test_leaves_one*", "The test left threads behind: left-over*"])


RECORDS_TESTS = """
    import pathlib

    import pytest

    def test_by_the_fixture(records: pathlib.Path) -> None:
        assert (records / "pump.npz").is_file()

    @pytest.mark.records
    def test_by_the_mark() -> None:
        pass
"""


def test_records_tests_are_skipped_and_counted_where_there_are_none(run: pytest.Pytester) -> None:
    """Only tests of the records may be skipped, only without the folder, and the summary says how many."""
    result = run.runpytest_inprocess(run.makepyfile(RECORDS_TESTS))
    result.assert_outcomes(skipped=2)
    result.stdout.fnmatch_lines(["records: folder absent, 2 tests skipped (*records)", "*2 skipped in *"])


def test_records_tests_run_where_there_are_some(run: pytest.Pytester) -> None:
    """With the folder they run, and the summary counts the files of samples, not their descriptions."""
    folder = run.mkdir("records")
    (folder / "pump.npz").touch()
    (folder / "README.md").touch()
    result = run.runpytest_inprocess(run.makepyfile(RECORDS_TESTS))
    result.assert_outcomes(passed=2)
    result.stdout.fnmatch_lines(["records: 1 files of measured machines in *records", "*2 passed in *"])


def test_a_records_test_may_not_skip_for_another_reason(run: pytest.Pytester) -> None:
    """Where the folder is there, a test of the records fails like any other when it skips itself."""
    run.mkdir("records")
    path = run.makepyfile(
        """
        import pytest

        @pytest.mark.records
        def test_skips() -> None:
            pytest.skip("not today")
        """
    )
    run.runpytest_inprocess(path).assert_outcomes(failed=1)


def test_figures_stand_before_the_last_line(run: pytest.Pytester) -> None:
    """What a test reports through `figure` is printed at the end, and pytest's summary stays the last line."""
    path = run.makepyfile("def test_measures(figure) -> None: figure('ratio', '1.02 of 1')")
    result = run.runpytest_inprocess(path)
    result.stdout.fnmatch_lines(["=* figures =*", "ratio: 1.02 of 1"])
    assert "1 passed in " in result.outlines[-1]


def test_generated_examples_are_the_same_in_every_run(run: pytest.Pytester) -> None:
    """Hypothesis draws the same examples every time, keeps none on disk and sets no deadline."""
    path = run.makepyfile(
        """
        import hypothesis

        def test_profile() -> None:
            settings = hypothesis.settings()
            assert settings.derandomize
            assert settings.deadline is None
            assert settings.database is None
        """
    )
    run.runpytest_inprocess(path).assert_outcomes(passed=1)
