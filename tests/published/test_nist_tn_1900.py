"""NIST TN 1900 (2015), example E2 (from memory)."""


def test_monthly_mean_of_daily_temperatures(checked):
    assert checked("nist_tn_1900")
