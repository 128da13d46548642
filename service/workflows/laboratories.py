"""Laboratories: what is known of the errors of their reference methods, dated, and used by reference.

A budget or a study that names a component of a laboratory takes what the entry says at that moment. What it
took is kept with it, with the revision of the entry, so that nothing moves when the laboratory changes later.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import replace
from datetime import date
from typing import Any, Final

from service.documents import (
    DeclaredEvidence,
    Evidence,
    Laboratory,
    LaboratoryEvidence,
    LaboratoryMethod,
    StatedEvidence,
    StudyEvidence,
)
from service.schemas import load
from service.schemas.evidence import LABORATORY_COMPONENTS
from service.store.rows import StoredDocument
from service.store.unit_of_work import UnitOfWork
from service.workflows.evidence import Behind, FaultCollector, in_unit, resolve_stated
from service.workflows.reference_methods import is_same_method

_WITHIN: Final = frozenset({"repeatability"})
_REPEATABILITY: Final = frozenset({"repeatability", "resolution"})
_BETWEEN: Final = frozenset({"between_laboratories", "reproducibility"})


def resolve(
    unit_of_work: UnitOfWork,
    evidence: Evidence,
    *,
    code: str,
    unit: str,
    pointer: str,
    characteristic: str | None,
    extended: bool = False,
) -> Behind:
    """Find the estimate behind evidence of any form, expressed in ``unit``.

    ``characteristic`` is the one that a laboratory is asked about when the evidence does not say; for
    ``extended`` see resolve_stated.

    Raises
    ------
    InvalidRequest
        There is no such study, estimate, laboratory or component, a declared figure does not say what it
        means, or a component of a laboratory is not dated.
    """
    if not isinstance(evidence, LaboratoryEvidence):
        return resolve_stated(
            unit_of_work, evidence, code=code, unit=unit, pointer=pointer, extended=extended
        )
    about = evidence.characteristic or characteristic
    stored, method, stated = _component(unit_of_work, evidence, about, pointer)
    code = f"{evidence.laboratory}/{about}/{evidence.component}"
    behind = _behind(unit_of_work, code, stated, unit, pointer, extended=extended)
    _check_is_dated(evidence, stated, behind, pointer)
    assert behind.serves_until is not None  # checked just now
    # The study belongs to the laboratory, not to the analyzer and product that it is used for.
    reference = {
        "code": evidence.laboratory,
        "component": evidence.component,
        "characteristic": about,
        **_entry_used(stored, method, stated, behind.serves_until),
    }
    return replace(behind, study=None, diagnostics={}, laboratory=reference)


def _entry_used(
    stored: StoredDocument, method: LaboratoryMethod, stated: StatedEvidence, serves_until: date
) -> dict[str, Any]:
    return {
        "method": method.method,
        "revision": stored.revision,
        "entry": {"chain": stored.chain, "sequence": stored.sequence},
        "study": stated.study if isinstance(stated, StudyEvidence) else None,
        "serves_until": serves_until.isoformat(),
    }


def check_laboratory(unit_of_work: UnitOfWork, laboratory: Laboratory, collector: FaultCollector) -> None:
    """Refuse components that are about something else than the laboratory, its method and characteristic."""
    for characteristic, method in laboratory.methods.items():
        for name in LABORATORY_COMPONENTS:
            stated: StatedEvidence | None = getattr(method, name)
            if stated is None:
                continue
            pointer = f"#/methods/{characteristic}/{name}"
            code = f"{laboratory.code}/{characteristic}/{name}"
            behind = collector.attempt(pointer, _behind, unit_of_work, code, stated, None, pointer)
            if behind is not None:
                _check_study(laboratory.code, characteristic, method, name, behind, pointer, collector)
                _check_kind(name, behind, pointer, collector)


# --- one component -------------------------------------------------------------------------------------


def _component(
    unit_of_work: UnitOfWork, evidence: LaboratoryEvidence, about: str | None, pointer: str
) -> tuple[StoredDocument, LaboratoryMethod, StatedEvidence]:
    """Find the entry of a laboratory, its method and the component. Raises InvalidRequest."""
    collector = FaultCollector()
    code, name = evidence.laboratory, evidence.component
    stored = unit_of_work.master.get("laboratory", code)
    methods = {} if stored is None else load(Laboratory, stored.document).methods
    method = None if about is None else methods.get(about)
    stated: StatedEvidence | None = None if method is None else getattr(method, name)
    if stored is None:
        collector.add(f"{pointer}/laboratory", f"there is no laboratory {code!r}", "the code of a laboratory")
    elif about is None:
        collector.add(f"{pointer}/characteristic", "is missing", f"one of {', '.join(methods)}")
    elif method is None:
        collector.add(
            f"{pointer}/characteristic", f"{code} has no method for {about!r}", f"one of {', '.join(methods)}"
        )
    elif stated is None:
        collector.add(
            f"{pointer}/component",
            f"{code} states no {name} of {about}",
            f"a component that stands in the entry of {code}; put it there with its evidence",
        )
    collector.finish("Evidence is missing.")
    assert stored is not None and method is not None and stated is not None
    return stored, method, stated


def _behind(
    unit_of_work: UnitOfWork,
    code: str,
    stated: StatedEvidence,
    unit: str | None,
    pointer: str,
    *,
    extended: bool = False,
) -> Behind:
    """Find the estimate of a component; in its own unit where none is asked for."""
    if isinstance(stated, StudyEvidence):
        return resolve_stated(unit_of_work, stated, code=code, unit=unit, pointer=pointer, extended=extended)
    # One figure is one mean square, whoever refers to it; another figure is another one.
    text = json.dumps(dict(stated.declaration), sort_keys=True)
    code = f"{code}/{hashlib.sha256(text.encode()).hexdigest()[:8]}"
    own = stated.declaration.get("unit")
    if stated.declaration.get("meaning") == "relative" or own is None:
        return resolve_stated(unit_of_work, stated, code=code, unit=unit, pointer=pointer)
    behind = resolve_stated(unit_of_work, stated, code=code, unit=own, pointer=pointer)
    return replace(behind, estimate=in_unit(behind.estimate, own, unit or own, pointer))


def _check_is_dated(
    evidence: LaboratoryEvidence, stated: StatedEvidence, behind: Behind, pointer: str
) -> None:
    """Refuse a figure of which nobody knows how old it is. Raises InvalidRequest."""
    collector = FaultCollector()
    if behind.serves_until is None or (isinstance(stated, DeclaredEvidence) and stated.stated_on is None):
        collector.add(
            f"{pointer}/component",
            f"{evidence.laboratory} does not say how long its {evidence.component} serves",
            f"stated_on and serves_until beside the declaration in the entry of {evidence.laboratory}",
        )
    collector.finish("A component of a laboratory is not dated.")


# --- what a component may rest on ----------------------------------------------------------------------


def _check_study(
    laboratory: str,
    characteristic: str,
    method: LaboratoryMethod,
    name: str,
    behind: Behind,
    pointer: str,
    collector: FaultCollector,
) -> None:
    study = behind.study
    if study is None:
        return
    pointer = f"{pointer}/study"
    if characteristic not in (study.characteristic, *study.characteristics):
        detail = f"{study.code} is about {study.characteristic!r}"
        collector.add(pointer, detail, f"a study about {characteristic!r}")
    # What laboratories differ by is found among several of them, and belongs to each.
    allowed = (laboratory, None) if name == "trueness" else (laboratory,)
    if study.laboratory not in allowed:
        made = f"in {study.laboratory!r}" if study.laboratory else "in a laboratory that it does not name"
        collector.add(pointer, f"{study.code} was made {made}", f"a study made in {laboratory!r}")
    if study.calibrations:
        detail = f"{study.code} was made on {', '.join(study.calibrations)}"
        collector.add(pointer, detail, "a study of the reference method itself")
    found = study.reference_methods.get(characteristic)
    if found is not None and not is_same_method(found, method.method):
        collector.add(pointer, f"{study.code} was made by {found!r}", f"a study made by {method.method!r}")


def _check_kind(name: str, behind: Behind, pointer: str, collector: FaultCollector) -> None:
    """Refuse an estimate that is no figure of this kind: what may be taken out is not what is added."""
    estimate = behind.estimate
    inside = frozenset((estimate.name, *estimate.contains))
    said, where = repr(estimate.name), f"{pointer}/estimate"
    if not estimate.usable:
        collector.add(where, f"{said} is not usable", "an estimate above zero")
    elif estimate.value is not None:
        expected = "an uncertainty; a known bias is corrected in the results"
        collector.add(where, f"{said} is a value", expected)
    elif name == "trueness":
        if (behind.evaluation_type == "A" or inside & _WITHIN) and not inside & _BETWEEN:
            expected = "what laboratories differ by, or a ring test"
            collector.add(where, f"{said} says nothing of trueness", expected)
    elif inside & _BETWEEN:
        collector.add(where, f"{said} holds what laboratories differ by", "one within a laboratory")
    elif name == "run" and inside & _WITHIN:
        expected = "what runs differ by beside their repeatability"
        collector.add(where, f"{said} holds the repeatability", expected)
    elif name == "repeatability" and not set(estimate.contains) <= _REPEATABILITY:
        others = ", ".join(sorted(set(estimate.contains) - _REPEATABILITY))
        collector.add(where, f"{said} holds {others}", "the repeatability alone")


def used(behind: Behind, **particulars: Any) -> Mapping[str, Any]:
    """Write down which entry of a laboratory stands behind something, with what was taken from it."""
    assert behind.laboratory is not None
    estimate = behind.estimate
    figures = {
        "standard_uncertainty": estimate.standard_uncertainty,
        "degrees_of_freedom": None
        if estimate.degrees_of_freedom == float("inf")
        else estimate.degrees_of_freedom,
    }
    return {**particulars, **behind.laboratory, **figures}
