"""JCGM 106:2012, 7.3.3 and 7.4 (from memory)."""


def test_conformance_probabilities(checked):
    assert checked("jcgm_106")
