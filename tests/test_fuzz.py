"""A twentieth of the damage that `python -m tests.benchmarks fuzz` does; what is right is said there."""

from tests.benchmarks import fuzz

COUNT, SEED = fuzz.FULL // 20, 7


def test_damaged_board_bench_and_dialect_files_are_told_or_right():
    assert fuzz.files(COUNT, SEED)


def test_damaged_run_files_and_journals_are_told_or_whole_before_the_damage():
    assert fuzz.runs(COUNT, SEED)


def test_damaged_instrument_replies_are_told_or_right_in_time_and_in_step():
    assert fuzz.replies(COUNT, SEED)
