"""Whether this process is able to decide."""

from __future__ import annotations

from typing import Any

from service.errors import Unavailable
from service.workflows.services import Services


def ready(services: Services) -> dict[str, Any]:
    """Say that the writer runs and the database answers. Raises Unavailable when one does not."""
    if not services.writer.alive:
        raise Unavailable("The writer does not run; this process cannot record decisions.", retry_after=5)
    with services.database.reading() as unit_of_work:
        revision = unit_of_work.revision()
    return {"ready": True, "revision": revision}
