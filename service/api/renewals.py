"""A study renewed behind all budgets that use it: submitted in one act, compared, approved in one act."""

from __future__ import annotations

from flask import Response
from flask_smorest import Blueprint

from service.api import requests
from service.api.answers import answer, recorded
from service.api.operations import SIGNED, Operation, describe
from service.documents import Replacement
from service.workflows import renewal_approvals, renewals

blueprint = Blueprint("renewals", __name__, description="One study renewed behind many budgets.")

_ALL = "/v1/studies/<code:code>/replacements"
_ONE = f"{_ALL}/<code:replacement>"


@describe(blueprint, _ALL, "POST", Operation("Renewal", (201,), Replacement, key="required", problems=(409,)))
def replace_study(code: str) -> Response:
    """Draft and submit a version of every budget in force that uses a study, with another study instead."""
    replacement = requests.body(Replacement)
    request = requests.recording()
    return recorded(renewals.submit(requests.services(), requests.actor(), code, replacement, request))


@describe(blueprint, _ONE, "GET", Operation("RenewalComparison", problems=(422,)))
def compare_renewal(code: str, replacement: str) -> Response:
    """Compare what a renewal that waits changes, study by study and budget by budget."""
    requests.query()
    return answer(renewal_approvals.comparison(requests.services(), requests.actor(), code, replacement))


@describe(
    blueprint,
    f"{_ONE}/approve",
    "POST",
    Operation("Renewal", body=SIGNED, key="required", problems=(409,)),
)
def approve_renewal(code: str, replacement: str) -> Response:
    """Put all versions of a renewal in force; another person's act."""
    signed = requests.body(SIGNED)
    requests.forget_signature()
    request = requests.recording()
    result = renewal_approvals.approve(
        requests.services(), requests.actor(), code, replacement, signed, request
    )
    return recorded(result, 200)
