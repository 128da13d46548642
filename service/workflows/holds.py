"""Reasons to hold a lot."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Hold:
    """A reason why a verdict is no release, in words, with what to do next."""

    code: str
    detail: str
    next: str
