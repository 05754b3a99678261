from hypothesis import given
from hypothesis import strategies as st

from humbell.sources.repeats import Repeats


@given(st.lists(st.tuples(st.sampled_from("abc"), st.integers(0, 60)), max_size=300))
def test_nothing_passes_twice(came: list[tuple[str, int]]) -> None:
    """Of the runs that are remembered no number is new twice, in whatever order it comes again."""
    repeats, passed = Repeats(window=16, boots=3), []
    for boot, seq in came:
        if repeats.judge(boot, seq) is None:
            passed.append((boot, seq))
            repeats.remember(boot, seq)
    assert len(passed) == len(set(passed))


@given(st.permutations(range(16)))
def test_what_comes_out_of_order_within_the_window_passes(order: list[int]) -> None:
    """A block that overtook another one does not make a repetition of it."""
    repeats = Repeats(window=16)
    for seq in order:
        assert repeats.judge("a", seq) is None
        repeats.remember("a", seq)
    assert {repeats.judge("a", seq) for seq in order} == {"duplicate"}


def test_what_lies_too_far_back_is_no_longer_told_from_a_repetition() -> None:
    """It is not measured; that it may never have come is what its reason says."""
    repeats = Repeats(window=10)
    repeats.remember("a", 100)
    assert repeats.judge("a", 91) is None
    assert repeats.judge("a", 90) == "old_number"
    assert repeats.judge("a", 0) == "old_number"
    assert repeats.judge("b", 0) is None


def test_the_memory_is_bounded() -> None:
    """Numbers and runs without end leave the newest known."""
    repeats = Repeats(window=100, boots=4)
    for seq in range(10_000):
        repeats.remember("a", seq)
    assert repeats.judge("a", 9_900) == "duplicate"
    assert len(repeats) < 200
    for boot in range(1_000):
        repeats.remember(str(boot), 0)
    assert len(repeats) == 4
    assert repeats.judge("a", 9_999) is None
    assert repeats.judge("999", 0) == "duplicate"


def test_the_run_not_heard_of_for_longest_is_forgotten_first() -> None:
    """Two senders on one topic stay known while a third one restarts again and again."""
    repeats = Repeats(boots=3)
    for number in range(50):
        repeats.remember("a", number)
        repeats.remember("b", number)
        repeats.remember(f"restarts-{number}", 0)
        assert repeats.judge("a", 0) == repeats.judge("b", 0) == "duplicate"
