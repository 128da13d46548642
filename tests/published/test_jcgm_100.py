"""JCGM 100:2008. Its figures are from memory unless a case says where they were found."""


def test_every_figure_of_its_examples(checked):
    assert checked("jcgm_100")


def test_what_does_not_follow_from_its_inputs_is_said(checked):
    """H.1 and H.2: printed figures that come from rounded ones."""
    cases = checked("jcgm_100")
    said = {(c.id, item.name) for c in cases.values() for item in c.expected if item.does_not_follow}
    assert said == {("gum-H.1", "uc2"), ("gum-H.1", "U99"), ("gum-H.2", "uX")}
