import pytest

from budgets.levels import LEVELS, levels_from


@pytest.mark.parametrize("first", LEVELS)
def test_the_default_level_stands_in_front_and_none_is_lost(first):
    levels = levels_from(first)
    assert levels[0] == first
    assert sorted(levels) == sorted(LEVELS)
