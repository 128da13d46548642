"""What `shoalmark import` shows while it works: a bar on a terminal, a line per study everywhere."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

from rich.console import Console
from rich.progress import Progress

from service.documents import Study
from service.settings import Settings
from service.workflows.study_imports import Imported, read_study, record_files


def import_files(
    settings: Settings,
    files: Sequence[Path],
    *,
    about: Path | None,
    said: dict[str, Any],
    sheet: str | None,
    check: bool,
) -> None:
    """Read all files, then record their studies, or with ``check`` only say that they can be read.

    Raises
    ------
    ServiceError
        A file cannot be read, or a study not recorded; the message names the file.
    """
    console = Console(highlight=False, soft_wrap=True)
    with Progress(console=console, transient=True, disable=not console.is_terminal) as progress:
        task = progress.add_task("reading", total=len(files) * (1 if check else 2))
        found: list[tuple[Path, Study]] = []
        for file in files:
            found.append((file, read_study(file, about, said, sheet)))
            progress.advance(task)
        if check:
            for file, study in found:
                progress.print(f"{file}: {len(study.rows)} rows for {study.code}, not recorded", markup=False)
            return

        def show(imported: Imported) -> None:
            progress.advance(task)
            progress.print(_line(imported), markup=False)

        progress.update(task, description="evaluating")
        _record(settings, found, show)


def _record(settings: Settings, found: list[tuple[Path, Study]], done: Callable[[Imported], None]) -> None:
    from service import create_services
    from service.store.schema import check_current

    check_current(settings.database_url)
    services = create_services(settings)
    try:
        record_files(services, found, done)
    finally:
        services.close()


def _line(imported: Imported) -> str:
    evaluation = imported.answer["evaluation"]
    code = imported.answer["study"]["code"]
    state = "recorded before" if imported.earlier else "recorded"
    lines = [f"{imported.file}: {code} {state}, {evaluation['used']} rows used"]
    for estimate in evaluation["estimates"]:
        uncertainty = estimate["standard_uncertainty"]
        nu = estimate["degrees_of_freedom"]
        shown = "none" if uncertainty is None else f"{uncertainty:.4g}"
        of = "" if nu is None else f", {nu:.3g} degrees of freedom"
        lines.append(f"  {estimate['name']}: standard uncertainty {shown}{of}")
    lines.extend(f"  warning: {warning['detail']}" for warning in evaluation["warnings"])
    return "\n".join(lines)
