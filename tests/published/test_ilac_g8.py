"""ILAC-G8:09/2019, Table 1 (partly from memory)."""


def test_bounds_of_false_acceptance(checked):
    assert checked("ilac_g8")
