"""False accept and false reject at 4:1, as the literature on ANSI/NCSL Z540.3 prints them (found)."""


def test_average_false_accept_and_false_reject(checked):
    assert checked("z540_3")
