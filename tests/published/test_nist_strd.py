"""NIST Statistical Reference Datasets, one-way analysis of variance (package data)."""


def test_certified_analyses_of_variance(checked):
    assert checked("nist_strd")
