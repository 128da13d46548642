"""EURACHEM/CITAC QUAM, A1 to A5 (found, partly from memory)."""


def test_budgets_that_are_products(checked):
    assert checked("eurachem_quam")
