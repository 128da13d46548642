"""ISO/TS 28037:2010, clauses 6 and 7 (from memory): straight lines, uncertainties of y or of both sides."""


def test_straight_lines(checked):
    assert checked("iso_ts_28037")
