"""Values less their common offset, subtracted in decimal so that no digit of the differences is lost."""

from __future__ import annotations

from collections.abc import Sequence
from decimal import Decimal


def without_offset(values: Sequence[float]) -> tuple[float, list[float]]:
    """Return the first value, and by how much every value differs from it.

    Parameters
    ----------
    values : sequence of float, shape (n,), finite

    Returns
    -------
    tuple of (float, list of float)
        The offset and the differences from it.

    Notes
    -----
    A binary64 next to 1e12 is off by 6e-5, which a difference of two such numbers keeps. The shortest decimal
    that reads back as the same number is what was written on the instrument's display, and decimals subtract
    without loss. Source: the construction of the NIST Statistical Reference Datasets SmLs07 to SmLs09.

    Examples
    --------
    >>> without_offset([1000000000000.4, 1000000000000.3])
    (1000000000000.4, [0.0, -0.1])
    """
    first = Decimal(repr(float(values[0])))
    return values[0], [float(Decimal(repr(float(value))) - first) for value in values]
