"""NIST/SEMATECH e-Handbook, 1.3.5.8 and 1.3.5.17.3 (from memory)."""


def test_confidence_limits_and_extreme_deviates(checked):
    assert checked("nist_handbook")
