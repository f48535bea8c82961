import pytest

from starkiln.engine.pace import FIRST_GUESS_SECONDS, Limits, Pace
from starkiln.settings.models import Sampling


def limits(row_seconds=45.0, **sampling):
    return Limits(row_seconds, Sampling(**sampling))


def test_before_anything_is_known_the_pace_is_a_guess():
    assert Pace().per_row == Pace().fastest == FIRST_GUESS_SECONDS
    assert Pace().seconds_for(5000) == pytest.approx(101.0)


def test_the_pace_is_the_median_of_what_was_measured():
    pace = Pace([0.01, 0.02])
    pace.note(100, 100.0)
    assert pace.per_row == 0.02
    assert pace.seconds_for(1000, kept=20_000) == pytest.approx(1 + 20 + 2)
    assert pace.least_seconds_for(1000) == pytest.approx(1 + 10)


def test_a_task_of_few_fits_says_nothing_of_the_pace():
    pace = Pace()
    pace.note(9, 90.0)
    pace.note(0, 1.0)
    assert pace.per_row == FIRST_GUESS_SECONDS


def test_one_hanging_row_of_a_part_costs_less_than_ten_minutes():
    spans = (5000, 313, 20, 2, 1, 1)
    seconds = [limits().limit(rows, Pace()) for rows in spans]
    assert seconds == pytest.approx([320, 38.78, 21.2, 20.12, 45, 45])
    assert sum(seconds) < 600


def test_limits_follow_the_pace_the_settings_and_the_length_of_chains():
    slow = Pace([1.0])
    assert limits().limit(100, slow) == pytest.approx(20 + 300)
    assert limits(90.0).limit(1, Pace()) == 90
    assert limits(90.0).limit(100, Pace()) == pytest.approx(2 * 26)
    assert limits(max_steps=8000).limit(1, Pace()) == 90
    assert limits(max_steps=64).limit(1, Pace()) == 45


def test_rows_taken_over_have_their_time_too():
    assert limits().limit(0, Pace(), kept=1000) == pytest.approx(30)
    assert limits().limit(1, Pace(), kept=1000) > 30
