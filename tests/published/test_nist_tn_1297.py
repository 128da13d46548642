"""NIST TN 1297 (1994), Table D.1: components found, the total from memory."""


def test_end_gauge_with_second_order_terms_as_components(checked):
    assert checked("nist_tn_1297")
