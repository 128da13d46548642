"""JCGM 101:2008, 7.9.2 and 9.2 to 9.4 (from memory): the law of propagation and Monte Carlo."""


def test_every_figure_of_its_examples(checked):
    assert checked("jcgm_101")
