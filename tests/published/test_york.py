"""Pearson's data with York's weights (found, and package data)."""


def test_both_sides_with_weights_of_their_own(checked):
    assert checked("york")
