"""The levels at which an error is drawn anew, from the inside out.

A reading's repeatability is drawn anew with every reading, the bias of a calibration stays the same
until the analyzer is calibrated again. Averages help only against what is drawn anew within them.
"""

from __future__ import annotations

LEVELS: tuple[str, ...] = (
    "reading",
    "presentation",
    "increment",
    "sample",
    "session",
    "instrument",
    "lot",
    "calibration",
    "reference",
)


def levels_from(first: str) -> tuple[str, ...]:
    """Return the levels with ``first`` in front, the others behind it in their order.

    Parameters
    ----------
    first : str
        The default level.

    Returns
    -------
    tuple of str
        All levels.

    Examples
    --------
    >>> levels_from("reference")[:2]
    ('reference', 'reading')
    """
    return (first, *(level for level in LEVELS if level != first))
