"""A small HTTP client for the demo: what a plant's own program would do, on the standard library."""

from __future__ import annotations

import http.client
import json
import uuid
from dataclasses import dataclass
from typing import Any
from urllib.parse import urlencode


@dataclass(frozen=True)
class Answer:
    """Status, headers and document of an answer."""

    status: int
    headers: dict[str, str]
    document: Any


class UnexpectedAnswer(Exception):
    """The service answered something else than the demo expects."""


class Client:
    """Speaks to the service over one kept connection."""

    def __init__(self, host: str, port: int) -> None:
        self._connection = http.client.HTTPConnection(host, port, timeout=10)

    def get(self, token: str, path: str) -> Any:
        """Read a document."""
        return self.call("GET", path, token, expect=(200,)).document

    def put(self, token: str, path: str, document: dict[str, Any]) -> Any:
        """Put a document that does not exist yet."""
        return self.call("PUT", path, token, document, expect=(200, 201)).document

    def post(
        self, token: str, path: str, document: dict[str, Any] | None = None, *, key: str | None = None
    ) -> Any:
        """Record something under an idempotency key of its own."""
        sent = {"Idempotency-Key": key or str(uuid.uuid4())}
        return self.call("POST", path, token, document, headers=sent, expect=(200, 201)).document

    def post_csv(self, token: str, path: str, about: dict[str, Any], content: bytes) -> Any:
        """Record a study whose data are a CSV file; what it is about stands in the query."""
        said = {name: value if isinstance(value, str) else json.dumps(value) for name, value in about.items()}
        sent = {"Idempotency-Key": str(uuid.uuid4()), "Content-Type": "text/csv"}
        path = f"{path}?{urlencode(said)}"
        return self.call("POST", path, token, content, headers=sent, expect=(200, 201)).document

    def call(
        self,
        method: str,
        path: str,
        token: str | None,
        document: dict[str, Any] | bytes | None = None,
        *,
        headers: dict[str, str] | None = None,
        expect: tuple[int, ...] | None = None,
    ) -> Answer:
        """Make one call. Raises UnexpectedAnswer for a status that is not among those expected."""
        sent = dict(headers or {})
        if token is not None:
            sent["Authorization"] = f"Bearer {token}"
        body = document if isinstance(document, bytes) else None
        if isinstance(document, dict):
            body = json.dumps(document).encode()
            sent["Content-Type"] = "application/json"
        self._connection.request(method, path, body=body, headers=sent)
        response = self._connection.getresponse()
        content = response.read()
        try:
            found = json.loads(content) if content else None
        except ValueError:
            found = content.decode(errors="replace")
        answer = Answer(
            response.status, {name.lower(): value for name, value in response.getheaders()}, found
        )
        if expect is not None and answer.status not in expect:
            raise UnexpectedAnswer(f"{method} {path}: {answer.status} {json.dumps(found, indent=1)[:2000]}")
        return answer

    def close(self) -> None:
        """Close the connection."""
        self._connection.close()
