"""Factors of control charts as in ISO 7870-2 (found as a table on the web, and from memory)."""


def test_factors_of_control_charts(checked):
    assert checked("iso_7870_2")
