"""The record: whether it is whole."""

from __future__ import annotations

from flask import Response
from flask_smorest import Blueprint

from service.api import requests
from service.api.answers import answer
from service.api.operations import Operation, describe
from service.workflows import ledger

blueprint = Blueprint("ledger", __name__, description="The record, as a chain of hashes.")


@describe(blueprint, "/v1/ledger/verification", "GET", Operation("Verification", problems=(422,)))
def get_verification() -> Response:
    """Read every entry and check it; names the first altered one."""
    requests.query()
    return answer(ledger.verification(requests.services(), requests.actor()))
