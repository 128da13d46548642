"""NBS Handbook 91, confidence factors (from memory)."""


def test_confidence_factors_of_a_standard_deviation(checked):
    assert checked("nbs_handbook_91")
