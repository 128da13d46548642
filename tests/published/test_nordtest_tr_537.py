"""Nordtest TR 537, NH4-N (from memory)."""


def test_within_laboratory_reproducibility_and_bias(checked):
    assert checked("nordtest_tr_537")
