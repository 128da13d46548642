"""NIST/SEMATECH e-Handbook, 1.3.5.8 (from memory)."""


def test_confidence_limits_of_a_standard_deviation(checked):
    assert checked("nist_handbook")
