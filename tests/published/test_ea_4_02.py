"""EA-4/02 M, S2, S3 and S9 (from memory)."""


def test_budgets_that_are_sums(checked):
    assert checked("ea_4_02")
