"""The calls on versioned documents, the same for budgets, specifications and the plant."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from flask import Response
from flask_smorest import Blueprint

from service.api import requests
from service.api.answers import answer, conditional, listed, recorded
from service.api.operations import PAGING, SIGNED, Operation, describe, parameter
from service.errors import NotFound
from service.workflows import approvals, versions

STATES = ("draft", "submitted", "in_force", "superseded", "withdrawn")

Act = Callable[..., tuple[dict[str, Any], bool]]


@dataclass(frozen=True)
class Versioned:
    """A kind of versioned document: its name in workflows, its dataclass, the name of its answer."""

    kind: str
    document_class: type[Any]
    form: str

    def create(self) -> Response:
        """Draft version 1 of a new code."""
        document = requests.body(self.document_class)
        request = requests.recording()
        return recorded(versions.create(requests.services(), requests.actor(), self.kind, document, request))

    def add(self, code: str) -> Response:
        """Draft the next version."""
        document = requests.body(self.document_class)
        request = requests.recording()
        return recorded(
            versions.add_version(requests.services(), requests.actor(), self.kind, code, document, request)
        )

    def replace(self, code: str, version: int) -> Response:
        """Replace a draft."""
        document = requests.body(self.document_class)
        result = versions.replace(
            requests.services(),
            requests.actor(),
            self.kind,
            code,
            version,
            document,
            if_match=requests.if_match(),
            request=requests.replaceable(),
        )
        return recorded(result, 200)

    def submit(self, code: str, version: int) -> Response:
        """Submit a draft for approval."""
        requests.no_body()
        request = requests.recording()
        return recorded(
            approvals.submit(
                requests.services(),
                requests.actor(),
                self.kind,
                code,
                version,
                request,
                if_match=requests.if_match(),
            ),
            200,
        )

    def sign(self, act: Act, code: str, version: int) -> Response:
        """Approve, return or withdraw, with a person's signature."""
        signed = requests.body(SIGNED)
        # The password must not end in the fingerprint, which is stored.
        requests.forget_signature()
        request = requests.recording()
        return recorded(
            act(
                requests.services(),
                requests.actor(),
                self.kind,
                code,
                version,
                signed,
                request,
                if_match=requests.if_match(),
            ),
            200,
        )

    def get(self, code: str, version: int) -> Response:
        """Read one version."""
        requests.query()
        found = versions.get(requests.services(), requests.actor(), self.kind, code, version)
        return conditional(found, found["revision"])

    def list(self, code: str | None = None) -> Response:
        """List versions, newest first."""
        page = requests.page(state=STATES)
        return listed(versions.listing(requests.services(), requests.actor(), self.kind, code, **page))

    def summary(self, code: str) -> Response:
        """Give the version in force and the open one."""
        requests.query()
        newest = self._first(code)
        if newest is None:
            raise NotFound(f"There is no {self.kind} {code!r}.")
        document = {
            "code": code,
            "newest": newest["version"],
            "in_force": self._first(code, "in_force"),
            "open": self._first(code, "submitted") or self._first(code, "draft"),
        }
        return answer(document)

    def _first(self, code: str, state: str | None = None) -> dict[str, Any] | None:
        page = versions.listing(requests.services(), requests.actor(), self.kind, code, state=state, limit=1)
        return page.items[0] if page.items else None


def register_versions(blueprint: Blueprint, prefix: str, kind: Versioned, code: str | None = None) -> None:
    """Register the calls on single versions under ``prefix``; ``code`` is that of a singleton."""
    fixed = {} if code is None else {"code": code}
    one = f"{prefix}/versions/<version:version>"
    recording = Operation(kind.form, (201,), kind.document_class, key="required", etag=True, problems=(409,))
    replacing = Operation(
        kind.form, (200,), kind.document_class, key="optional", if_match=True, etag=True, problems=(409,)
    )
    state = parameter("state", "Only versions in this state.", STATES)

    def add(views: Callable[..., Response], rule: str, method: str, operation: Operation, name: str) -> None:
        def view(**path: Any) -> Response:
            return views(**path, **fixed)

        view.__name__, view.__doc__ = name, views.__doc__
        describe(blueprint, rule, method, operation)(view)

    listing = Operation(f"{kind.form}Page", query=(*PAGING, state))
    add(kind.list, f"{prefix}/versions", "GET", listing, "list_versions")
    add(kind.add, f"{prefix}/versions", "POST", recording, "add_version")
    add(kind.get, one, "GET", Operation(kind.form, conditional=True, problems=(422,)), "get_version")
    add(kind.replace, one, "PUT", replacing, "replace_version")
    submitting = Operation(kind.form, key="required", etag=True, may_match=True, problems=(409,))
    add(kind.submit, f"{one}/submit", "POST", submitting, "submit_version")
    signing = Operation(kind.form, body=SIGNED, key="required", etag=True, may_match=True, problems=(409,))
    for name, act, about in (
        ("approve", approvals.approve, "Put a submitted version in force; another person's act."),
        ("return", approvals.return_, "Give a submitted version back as a draft."),
        ("withdraw", approvals.withdraw, "Withdraw an open version, or the one in force."),
    ):

        def sign(code: str, version: int, act: Act = act) -> Response:
            return kind.sign(act, code, version)

        sign.__doc__ = about
        add(sign, f"{one}/{name}", "POST", signing, f"{name}_version")


def register_collection(blueprint: Blueprint, prefix: str, kind: Versioned) -> None:
    """Register the calls on all codes of a kind."""
    state = parameter("state", "Only versions in this state.", STATES)
    recording = Operation(kind.form, (201,), kind.document_class, key="required", etag=True, problems=(409,))

    def create() -> Response:
        """Draft version 1 of a new code."""
        return kind.create()

    def list_all() -> Response:
        """List the versions of all codes, newest first."""
        return kind.list()

    def summary(code: str) -> Response:
        """Give the version in force and the open one."""
        return kind.summary(code)

    describe(blueprint, prefix, "POST", recording)(create)
    describe(blueprint, prefix, "GET", Operation(f"{kind.form}Page", query=(*PAGING, state)))(list_all)
    one = Operation(f"{kind.form}Summary", problems=(422,))
    describe(blueprint, f"{prefix}/<code:code>", "GET", one)(summary)
