"""The published cases, run as `service.published` runs them on a user's machine."""

from __future__ import annotations

from collections.abc import Callable, Mapping

import pytest

from service.published.cases import DIFFERS, LATER, Case, document, outcomes
from service.published.report import RUNNERS

Checked = Callable[..., dict[str, Case]]


@pytest.fixture
def checked() -> Checked:
    """Check a document: nothing differs, and exactly the named figures are left for later."""

    def check(name: str, later: Mapping[str, set[str]] | None = None) -> dict[str, Case]:
        cases = {case.id: case for case in document(name).cases}
        assert set(cases) == set(RUNNERS[name])
        for identity, case in cases.items():
            found = outcomes(case, RUNNERS[name][identity])
            differing = [(o.name, o.published, o.computed) for o in found if o.status == DIFFERS]
            assert not differing, (identity, differing)
            left = {o.name for o in found if o.status == LATER}
            assert left == (later or {}).get(identity, set()), identity
        return cases

    return check
