"""A clock that went back is told, because nothing else would show it.

Entries never go back in time: behind the newest one they take its instant until the clock has caught up. In
between lots are judged as of that instant, so whoever runs the service has to hear of it.
"""

from __future__ import annotations

import logging
from datetime import datetime, timedelta
from time import monotonic

from service.ledger import format_instant

TOLERANCE = timedelta(minutes=5)
QUIET_SECONDS = 60.0
"""However many acts are recorded, the warning comes at most so often."""

_log = logging.getLogger(__name__)


class ClockWatch:
    """Compares the clock with the newest entry of the record; one per database of a process."""

    def __init__(self) -> None:
        self._warned: float | None = None

    def look(self, now: datetime, newest: str) -> None:
        """Warn when ``newest``, the last ``recorded_at`` of all chains, lies well ahead of the clock."""
        # Compared as texts, which sort as the instants do: somebody may have altered what stands there.
        if newest <= format_instant(now + TOLERANCE):
            return
        moment = monotonic()
        if self._warned is not None and moment - self._warned < QUIET_SECONDS:
            return
        self._warned = moment
        _log.warning(
            "The clock says %s, but the newest entry was recorded at %s. New entries keep that time until "
            "the clock has caught up: set it right.",
            format_instant(now),
            newest,
        )
