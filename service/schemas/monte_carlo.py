"""A Monte Carlo run as it is asked for; how many trials are possible is judged by the computation."""

from __future__ import annotations

from service.documents import MonteCarloRequest
from service.schemas.base import StrictSchema
from service.schemas.fields import ByKey, Count, Name, Number


class MonteCarloRequestSchema(StrictSchema):
    """How a budget is held against a Monte Carlo run."""

    loads_to = MonteCarloRequest
    trials = Count(least=1, allow_none=True, load_default=None, about="null: as many as the tolerance needs.")
    seed = Count(load_default=1, about="The same seed and number of trials give the same result.")
    significant_digits = Count(
        least=1,
        most=4,
        allow_none=True,
        load_default=None,
        about="Of the standard uncertainty: half a unit of the last is the tolerance; null: 5 % of it.",
    )
    at = ByKey(
        Name(),
        Number(),
        allow_none=True,
        load_default=None,
        about="The readings; null: the middle of what was validated.",
    )
