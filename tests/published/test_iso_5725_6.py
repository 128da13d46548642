"""Critical range factors as ISO 5725-6 prints them (from memory)."""


def test_critical_range_factors(checked):
    assert checked("iso_5725_6")
