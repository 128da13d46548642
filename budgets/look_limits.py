"""Which estimates of a look at a lot are released, held or rejected: of all specifications together."""

from __future__ import annotations

import math
from dataclasses import dataclass

Interval = tuple[float, float]


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
    lower_further_limit, upper_further_limit : float, unit of the characteristic
        A lot that is held beyond them is not read again: a rule that holds it there plans no further round.
    """

    lower_acceptance_limit: float
    upper_acceptance_limit: float
    lower_rejection_limit: float
    upper_rejection_limit: float
    lower_range: float = -math.inf
    upper_range: float = math.inf
    lower_further_limit: float = -math.inf
    upper_further_limit: float = math.inf

    @property
    def released(self) -> Interval:
        """The interval of the estimates that are released; empty where its ends are the wrong way round."""
        return (
            max(self.lower_acceptance_limit, self.lower_range),
            min(self.upper_acceptance_limit, self.upper_range),
        )

    @property
    def held(self) -> tuple[Interval, ...]:
        """The intervals of the estimates that are held and may be read again."""
        (bottom, lower), (upper, top) = self._beside()
        return _real(
            (max(bottom, self.lower_further_limit), lower), (upper, min(top, self.upper_further_limit))
        )

    @property
    def held_for_good(self) -> tuple[Interval, ...]:
        """The intervals of the estimates that are held and not read again."""
        (bottom, lower), (upper, top) = self._beside()
        return _real(
            (-math.inf, self.lower_range),
            (bottom, min(lower, self.lower_further_limit)),
            (max(upper, self.upper_further_limit), top),
            (self.upper_range, math.inf),
        )

    def _beside(self) -> tuple[Interval, Interval]:
        """Return what lies between acceptance and rejection, within the validated range, below and above."""
        lower, upper = self.released
        return (
            (max(self.lower_rejection_limit, self.lower_range), lower),
            (upper, min(self.upper_rejection_limit, self.upper_range)),
        )

    @property
    def rejected(self) -> tuple[Interval, ...]:
        """The intervals of the estimates that are rejected."""
        return _real(
            (self.lower_range, min(self.lower_rejection_limit, self.upper_range)),
            (max(self.upper_rejection_limit, self.lower_range), self.upper_range),
        )


def _real(*intervals: Interval) -> tuple[Interval, ...]:
    """Return the intervals that are not empty."""
    return tuple(ends for ends in intervals if ends[0] < ends[1])
