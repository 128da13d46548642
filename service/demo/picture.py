"""The number line in plain text, for the terminal: the same picture as on the pages and in print.

Clear between the brackets is acceptance, ``/`` the guard band, ``:`` outside tolerance. Above the line lies
the coverage interval, below it hangs the estimate.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Final

WIDTH: Final = 64


def number_line(verdict: dict[str, Any]) -> list[str]:
    """Draw a verdict that has limits; three lines and a scale."""
    estimate, expanded = verdict["estimate"], verdict["expanded_uncertainty"]
    marks = [estimate - expanded, estimate + expanded]
    names = (
        "lower_tolerance_limit",
        "upper_tolerance_limit",
        "lower_acceptance_limit",
        "upper_acceptance_limit",
    )
    marks.extend(verdict[name] for name in names if verdict[name] is not None)
    margin = 0.12 * (max(marks) - min(marks))
    start, end = min(marks) - margin, max(marks) + margin

    def place(value: float) -> int:
        return int((value - start) / (end - start) * (WIDTH - 1) + 0.5)

    return [
        _coverage(place(estimate - expanded), place(estimate), place(estimate + expanded)),
        _line(start, end, place, verdict),
        " " * place(estimate) + "●",
        f"{start:<.2f}".ljust(WIDTH - 5) + f"{end:.2f} {verdict['unit']}",
    ]


def _coverage(left: int, middle: int, right: int) -> str:
    bar = [" "] * WIDTH
    bar[left : right + 1] = ["─"] * (right - left + 1)
    bar[left], bar[right], bar[middle] = "├", "┤", "┬"
    return "".join(bar).rstrip()


def _line(start: float, end: float, place: Callable[[float], int], verdict: dict[str, Any]) -> str:
    signs = [_sign(start + (end - start) * column / (WIDTH - 1), verdict) for column in range(WIDTH)]
    for name, bracket in (("lower_acceptance_limit", "["), ("upper_acceptance_limit", "]")):
        if verdict[name] is not None:
            signs[place(verdict[name])] = bracket
    return "".join(signs)


def _sign(value: float, verdict: dict[str, Any]) -> str:
    lower, upper = verdict["lower_tolerance_limit"], verdict["upper_tolerance_limit"]
    if (lower is not None and value < lower) or (upper is not None and value > upper):
        return ":"
    lower, upper = verdict["lower_acceptance_limit"], verdict["upper_acceptance_limit"]
    if (lower is not None and value < lower) or (upper is not None and value > upper):
        return "/"
    return "─"
