"""ISO/TS 28037:2010, clauses 6 and 7 (from memory): straight lines, uncertainties of y or of both sides."""


def test_straight_lines(checked):
    # The prediction of x from a new y is no task of this program.
    assert checked("iso_ts_28037", later={"ts28037-6": {"x0", "u_x0"}})
