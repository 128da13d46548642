"""The whole job walked through over HTTP, step by step, each printed with its figures."""

from __future__ import annotations

import time
from collections import Counter
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any, Final

from rich.console import Console
from rich.table import Table

from budgets.reporting import acceptance_limit_text, number_text
from service.demo import plant
from service.demo.client import Client
from service.demo.picture import number_line

SIDES: Final = ("lower", "upper")
FIRST_LOT: Final = "W26-04711"


@dataclass(frozen=True)
class Access:
    """The tokens and passwords of the demo."""

    line: str
    engineer: str
    approver: str
    approver_password: str


class Walk:
    """The steps of the job, in the order in which a plant takes them."""

    def __init__(self, client: Client, access: Access, console: Console) -> None:
        self._client = client
        self._access = access
        self._console = console

    def set_up(self) -> None:
        """Take the plant from nothing to a budget and specifications in force."""
        self._put_master_data()
        self._record_studies()
        for budget in plant.budgets():
            self._bring_into_force("budgets", budget)
        for specification in plant.specifications():
            self._bring_into_force("specifications", specification)
        for budget in plant.budgets():
            self._show_budget(budget["code"], budget["characteristic"])
        for budget in plant.budgets():
            self._show_limits(budget["characteristic"])

    def decide_first_lot(self) -> dict[str, Any]:
        """Judge a lot read a moment ago and show the answer."""
        now = datetime.now(UTC).isoformat(timespec="milliseconds")
        readings = [
            plant.reading(str(1), now, moisture, distance=distance, temperature=24.5)
            | {"measurement": f"{FIRST_LOT}-{scan}"}
            for scan, (moisture, distance) in enumerate(((2.91, 1.3), (2.97, 1.2)), start=1)
        ]
        request = plant.decision_request(FIRST_LOT, readings)
        answer = self._client.post(self._access.line, "/v1/decisions", request, key=f"demo-{FIRST_LOT}")
        self._show_decision(answer)
        return dict(answer)

    def decide_production(self) -> Counter[str]:
        """Judge the two hundred production lots and show what became of them."""
        outcomes: Counter[str] = Counter()
        started = time.perf_counter()
        for request in plant.lots():
            answer = self._client.post(
                self._access.line, "/v1/decisions", request, key=f"demo-{request['lot']}"
            )
            outcomes[answer["outcome"]] += 1
        seconds = time.perf_counter() - started
        table = self._table("Production lots judged, one call each", "outcome", "lots")
        for outcome in ("release", "hold", "reject"):
            table.add_row(outcome, str(outcomes[outcome]))
        table.add_row("time per lot", f"{seconds / outcomes.total() * 1000:.1f} ms")
        self._console.print(table)
        return outcomes

    def verify(self) -> bool:
        """Have the record verified and show the heads of its chains."""
        found = self._client.get(self._access.engineer, "/v1/ledger/verification")
        table = self._table("The record", "chain", "entries", "hash of the last entry")
        for chain in found["chains"]:
            table.add_row(chain["chain"], str(chain["entries"]), chain["hash"])
        self._console.print(table)
        self._console.print("The record is whole." if found["whole"] else f"NOT whole: {found['finding']}")
        return bool(found["whole"])

    # --- single steps ----------------------------------------------------------------------------------

    def _put_master_data(self) -> None:
        table = self._table("Master data", "put", "revision")
        for path, document in plant.master_data():
            answer = self._client.call("PUT", path, self._access.engineer, document, expect=(200, 201))
            table.add_row(path, answer.headers["etag"].strip('"'))
        self._console.print(table)

    def _record_studies(self) -> None:
        columns = ("study", "rows", "estimate", "u", "degrees of freedom", "95 % interval")
        table = self._table("Studies, evaluated from raw data", *columns)
        for study in plant.studies():
            answer = self._client.post(self._access.engineer, "/v1/studies", study)
            _add_estimates(table, study["code"], answer["evaluation"])
        self._console.print(table)
        table = self._table("Studies of further designs, their files uploaded as CSV", *columns)
        for about, content in plant.design_studies():
            answer = self._client.post_csv(self._access.engineer, "/v1/studies", about, content)
            _add_estimates(table, about["code"], answer["evaluation"])
        self._console.print(table)

    def _bring_into_force(self, kind: str, document: dict[str, Any]) -> None:
        """Draft, submit, and have another person approve."""
        self._client.post(self._access.engineer, f"/v1/{kind}", document)
        version = f"/v1/{kind}/{document['code']}/versions/1"
        self._client.post(self._access.engineer, f"{version}/submit")
        act = {"reason": "checked", "signature": {"password": self._access.approver_password}}
        approved = self._client.post(self._access.approver, f"{version}/approve", act)
        self._console.print(
            f"{document['code']}: version 1 drafted and submitted by {approved['drafted_by']}, "
            f"approved by {approved['approved_by']}, {approved['state'].replace('_', ' ')}."
        )

    def _show_budget(self, code: str, characteristic: str) -> None:
        """Show a budget as a person reads it: grouped by the level at which errors are drawn anew."""
        path = f"/v1/budgets/{code}/versions/1/evaluation?specification=legal"
        found = self._client.get(self._access.engineer, path)
        columns = ("component", "u of one draw", "c", "u in the result", "dof", "share", "limit without")
        table = self._table(f"Budget of {characteristic}, one sample read twice", *columns, "limit halved")
        for level in found["levels"]:
            lines = [line for line in found["components"] if line["level"] == level["level"]]
            for line in lines:
                table.add_row(
                    line["code"],
                    f"{line['standard_uncertainty']:.4f} %",
                    _figure(line["sensitivity_coefficient"], "+.2f", missing=""),
                    f"{line['contribution']:.4f} %",
                    _figure(line["degrees_of_freedom"], ".1f"),
                    f"{100 * line['share_of_variance']:.0f} %",
                    _moved(line["without"]),
                    _moved(line["halved"]),
                )
            table.add_row(
                f"[italic]each {level['level']}[/italic]",
                "",
                "",
                f"[italic]{level['contribution']:.4f} %[/italic]",
                "",
                f"[italic]{100 * level['share_of_variance']:.0f} %[/italic]",
                "",
                "",
                end_section=True,
            )
        table.add_row(
            "combined",
            "",
            "",
            f"{found['combined_standard_uncertainty']:.4f} %",
            _figure(found["effective_degrees_of_freedom"], ".1f"),
            f"U = {found['expanded_uncertainty']:.3f} %",
            _moved(found),
            "",
        )
        self._console.print(table)

    def _show_limits(self, characteristic: str) -> None:
        path = f"/v1/acceptance-limits/{plant.PRODUCT}/{characteristic}"
        found = self._client.get(self._access.line, path)
        columns = ("specification", "samples x readings", "tolerance limit", "guard band", "acceptance limit")
        table = self._table(f"Acceptance limits of {characteristic} now", *columns, "largest risk")
        for item in found["items"]:
            if item["procedure"]["readings_per_sample"] != 2:
                continue
            fixed = item["acceptance_limits"] == "fixed"
            table.add_row(
                f"{item['specification']['code']} version {item['specification']['version']}",
                f"{item['procedure']['samples']} x {item['procedure']['readings_per_sample']}"
                + (", as planned" if item["planned"] else ""),
                _span(*(_stated(item[f"{side}_tolerance_limit"]) for side in SIDES)),
                f"{item['guard_band']['upper']:.3f} %" if fixed else "",
                _span(*(_inward(item[f"{side}_acceptance_limit"], side) for side in SIDES))
                if fixed
                else "by the readings",
                f"{100 * item['largest_specific_risk']:.1f} %" if fixed else "",
            )
        self._console.print(table)

    def _show_decision(self, answer: dict[str, Any]) -> None:
        self._console.rule()
        self._console.print(
            f"Lot {answer['lot']}: [bold]{answer['outcome'].upper()}[/bold], recorded as {answer['id']} at "
            f"{answer['recorded_at']}"
        )
        for verdict in answer["verdicts"]:
            self._console.print()
            self._console.print(
                f"{verdict['specification']['code']}, {verdict['characteristic']}: {verdict['outcome']}, "
                "conformance probability "
                f"{verdict['display']['conformance_probability']}"
            )
            for line in number_line(verdict):
                self._console.print(f"  {line}", markup=False, highlight=False)
            self._console.print(f"  {verdict['display']['statement']}", highlight=False)
        for reason in answer["reasons"]:
            self._console.print(f"  {reason['detail']} {reason['next']}", highlight=False)
        self._console.print(f"  Not judged: {', '.join(answer['not_judged'])}.", highlight=False)
        self._console.print(f"  {answer['caution']}", highlight=False)
        self._console.print(f"  hash {answer['entry']['hash']}", highlight=False)
        self._console.rule()

    def _table(self, title: str, *columns: str) -> Table:
        self._console.print(f"\n[bold]{title}[/bold]")
        table = Table()
        for position, column in enumerate(columns):
            first = position == 0
            table.add_column(column, justify="left" if first else "right", no_wrap=first, overflow="fold")
        return table


def _add_estimates(table: Table, code: str, evaluation: dict[str, Any]) -> None:
    for position, estimate in enumerate(evaluation["estimates"]):
        name = estimate["name"].replace("_", " ")
        if not estimate["usable"]:
            name = f"{name} (not usable)"
        if estimate["value"] is not None:
            name = f"{name} = {estimate['value']:.4f} %"
        table.add_row(
            code if position == 0 else "",
            str(evaluation["used"]) if position == 0 else "",
            name,
            *_known_to(estimate),
            _interval(estimate["interval"]),
        )


def _stated(limit: float | None) -> str | None:
    return None if limit is None else number_text(limit)


def _inward(limit: float | None, side: str) -> str | None:
    return None if limit is None else acceptance_limit_text(limit, 3, side=side)


def _span(lower: str | None, upper: str | None) -> str:
    if lower is None:
        return f"at most {upper} %"
    return f"at least {lower} %" if upper is None else f"{lower} to {upper} %"


def _moved(figures: dict[str, Any]) -> str:
    """Write the acceptance limits that a budget would have."""
    limits = figures["acceptance_limits"]
    if limits is None or limits == {"lower": None, "upper": None}:
        return "none"
    lower, upper = (_inward(limits[side], side) for side in SIDES)
    if lower is None:
        return f"≤ {upper} %"
    return f"≥ {lower} %" if upper is None else f"{lower} .. {upper}"


def _figure(value: float | None, form: str, *, missing: str = "∞") -> str:
    return missing if value is None else format(value, form)


def _known_to(estimate: dict[str, Any]) -> tuple[str, str]:
    """Write how well an estimate is known; of several quantities at once there is no one figure."""
    if estimate.get("matrix_terms"):
        return "of three channels", ""
    return _figure(estimate["standard_uncertainty"], ".4f"), _figure(estimate["degrees_of_freedom"], ".1f")


def _interval(interval: dict[str, Any] | None) -> str:
    return "" if interval is None else f"{interval['lower']:.4f} to {interval['upper']:.4f}"
