"""The process engineer's question walked through: how close to the limit, what it brings, what to buy."""

from __future__ import annotations

from typing import Any, Final

from rich.console import Console
from rich.table import Table

from service.demo import questions
from service.demo.client import Client

_SHOWN: Final = 6


class SetPointWalk:
    """Asks for set points, improvements and giveaway over HTTP and prints what is answered."""

    def __init__(self, client: Client, engineer: str, console: Console) -> None:
        self._client, self._engineer, self._console = client, engineer, console

    def ask(self) -> dict[str, Any]:
        """Ask all three questions; gives the answer about the set point."""
        self._console.print("\n[bold]How close to the limit of moisture may the dryer run?[/bold]")
        found = self._post("/v1/set-points", questions.set_point_question())
        self._show_variation(found)
        self._show_set_points(found)
        self._say(found["statement"])
        over = found["nearest_over_the_interval"]
        ends = [_reading(over[name]) for name in ("least_variation", "most_variation")]
        self._say(
            f"These lots show the variation only so well: at the ends of its 95 % interval the nearest set "
            f"point is {ends[0]} or {ends[1]}."
        )
        controller = found["controller"]
        self._say(
            f"For the controller: {controller['set_point']} {controller['unit']}, as "
            f"{controller['analyzer']} with {controller['calibration']} reads it ({controller['basis']}), "
            f"until {controller['valid_until']}."
        )
        self._console.print("\n[bold]What did the lots of the record give away?[/bold]")
        self._say(self._post("/v1/giveaway", questions.giveaway_question())["statement"])
        self._console.print("\n[bold]What to buy first?[/bold]")
        bought = self._post("/v1/improvements", questions.improvements_question())
        self._show_improvements(bought)
        self._say(bought["statement"])
        return found

    def _post(self, path: str, document: dict[str, Any]) -> dict[str, Any]:
        return dict(self._client.post(self._engineer, path, document))

    def _show_variation(self, found: dict[str, Any]) -> None:
        seen, measurement = found["process_variation"], found["measurement"]
        self._say(
            f"{seen['lots']} first readings of lots in the record: mean {seen['mean']:.3f} %, true values "
            f"vary by {seen['true_standard_deviation']:.3f} %, readings by "
            f"{seen['reading_standard_deviation']:.3f} %. Acceptance limit "
            f"{measurement['upper_acceptance_limit']:.3f} % for the estimate, which is the reading less "
            f"{measurement['reading_less_estimate']:.3f} %."
        )

    def _show_set_points(self, found: dict[str, Any]) -> None:
        currency = found["money"]["currency"]
        table = Table()
        table.add_column("set point", no_wrap=True)
        for column in ("reading", "true mean", "released", "of them bad", "cost of a lot", "a year more"):
            table.add_column(column, justify="right")
        for name in ("today", "nearest", "cheapest"):
            figures = found[name]
            gain = figures.get("gain_per_year")
            table.add_row(
                name,
                f"{figures['set_point']:.3f} %",
                f"{figures['true_mean']:.3f} %",
                f"{100 * figures['release_rate']:.1f} %",
                f"{100 * figures['conditional_global_consumers_risk']:.2f} %",
                f"{figures['cost']:.0f} {currency}",
                "" if gain is None else f"{gain:+,.0f} {currency}",
            )
        self._console.print(table)

    def _show_improvements(self, found: dict[str, Any]) -> None:
        currency = found["money"]["currency"]
        table = Table()
        table.add_column("bought", no_wrap=True, overflow="fold")
        for column in ("u", "limit", "set point", "gain", "costs", f"net, {currency} a year"):
            table.add_column(column, justify="right")
        alone = [item for item in found["ranked"] if len(item["options"]) == 1]
        pairs = [item for item in found["ranked"] if len(item["options"]) == 2]
        for item in (found["as_it_is"], *alone[:_SHOWN], *pairs[:2]):
            table.add_row(
                " + ".join(item["options"]) or "nothing",
                f"{item['combined_standard_uncertainty']:.4f} %",
                f"{item['upper_acceptance_limit']:.3f} %",
                f"{item['set_point']:.3f} %",
                f"{item['gain_per_year']:,.0f}",
                f"{item['cost_per_year']:,.0f}",
                f"{item['net_gain_per_year']:,.0f}",
            )
        self._console.print(table)
        for item in alone:
            if item["net_gain_per_year"] < 0:
                self._say(f"{item['options'][0]} does not pay. {' '.join(item['remarks'])}".strip())

    def _say(self, text: str) -> None:
        self._console.print(text, highlight=False, markup=False)


def _reading(set_point: float | None) -> str:
    return "none" if set_point is None else f"{set_point:.3f} %"
