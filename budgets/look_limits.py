"""Which estimates of a look at a lot are released, held or rejected: of all specifications together."""

from __future__ import annotations

import math
from dataclasses import dataclass


@dataclass(frozen=True)
class LookLimits:
    """Which estimates of a look are released, and which are held to be read again.

    Parameters
    ----------
    lower_acceptance_limit, upper_acceptance_limit : float, unit of the characteristic
        Infinite where there is none.
    lower_rejection_limit, upper_rejection_limit : float, unit of the characteristic
        An estimate beyond them is rejected.
    lower_range, upper_range : float, unit of the characteristic
        Validated range: an estimate outside is held, and another look of the kind does not help.
    """

    lower_acceptance_limit: float
    upper_acceptance_limit: float
    lower_rejection_limit: float
    upper_rejection_limit: float
    lower_range: float = -math.inf
    upper_range: float = math.inf

    @property
    def released(self) -> tuple[float, float]:
        """The interval of the estimates that are released; empty where its ends are the wrong way round."""
        return (
            max(self.lower_acceptance_limit, self.lower_range),
            min(self.upper_acceptance_limit, self.upper_range),
        )

    @property
    def held(self) -> tuple[tuple[float, float], ...]:
        """The intervals of the estimates that are held and may be read again."""
        lower, upper = self.released
        bottom = max(self.lower_rejection_limit, self.lower_range)
        top = min(self.upper_rejection_limit, self.upper_range)
        return tuple(ends for ends in ((bottom, lower), (upper, top)) if ends[0] < ends[1])

    @property
    def rejected(self) -> tuple[tuple[float, float], ...]:
        """The intervals of the estimates that are rejected."""
        ends = (
            (self.lower_range, min(self.lower_rejection_limit, self.upper_range)),
            (max(self.upper_rejection_limit, self.lower_range), self.upper_range),
        )
        return tuple(pair for pair in ends if pair[0] < pair[1])
