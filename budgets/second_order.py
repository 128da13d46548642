"""Terms of second order of a budget, and the warning when they matter."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

from budgets.components import Component
from budgets.distributions import excess
from budgets.errors import CorrelationError
from budgets.evidence.evaluation import EvaluationWarning, variance
from budgets.linear_propagation import CompiledPropagation
from budgets.measurement_models import SecondOrder

_MATTERS = 0.05


def second_order_terms(
    law: CompiledPropagation, components: Sequence[Component], estimates: Mapping[str, float]
) -> SecondOrder:
    """Return the terms of second order of a budget.

    Parameters
    ----------
    law : CompiledPropagation
    components : sequence of Component
        Of its lines, in their order.
    estimates : mapping of str to float
        Of all quantities.

    Returns
    -------
    SecondOrder

    Raises
    ------
    CorrelationError
        If inputs are correlated: the terms hold for independent inputs only.
    ComponentError
        For a trapezoidal component without its ratio of top to base.

    Notes
    -----
    Source: JCGM 100:2008, 5.1.2 note (from memory). The fourth moment of a quantity is that of the sum of its
    components' errors; averaging n equal draws divides the excess by n (JCGM 101, from memory: cumulants of
    independent errors add).
    """
    if law.correlations or any(line.matrix_terms for line in law.lines):
        raise CorrelationError(
            "terms of second order hold for independent inputs; this budget has correlated ones",
            where=("correlations",),
        )
    variances: dict[str, float] = {}
    cumulants: dict[str, float] = {}
    owners: dict[str, str] = {}
    for index, (line, component) in enumerate(zip(law.lines, components, strict=True)):
        name = line.inputs[0]
        terms = line.terms_at({name: 1.0}, estimates)
        for term in terms:
            if owners.setdefault(term.mean_square.code, name) != name:
                raise CorrelationError(
                    f"terms of second order hold for independent inputs; {name} and "
                    f"{owners[term.mean_square.code]} share the mean square {term.mean_square.code}",
                    where=("components", index),
                )
        own = variance(terms)
        variances[name] = variances.get(name, 0.0) + line.weight * own
        # The fourth cumulant of a mean of n draws is that of one over n^3; the weight is 1/n.
        shape = excess(component.distribution, component.top_to_base_ratio)
        cumulants[name] = cumulants.get(name, 0.0) + shape * line.weight**3 * own**2
    moments = {name: 3 * value**2 + cumulants[name] for name, value in variances.items()}
    return law.model.second_order(estimates, variances, fourth_moments=moments)


def second_order_warnings(
    first_order: float, second_order: SecondOrder | None
) -> tuple[EvaluationWarning, ...]:
    """Return the warning that the model curves within its uncertainty, where it does.

    Parameters
    ----------
    first_order : float
        Variance of first order.
    second_order : SecondOrder or None

    Returns
    -------
    tuple of EvaluationWarning
        Empty while the terms of second order stay below 5 % of the variance and the shift of the mean below
        5 % of the standard uncertainty.
    """
    if second_order is None:
        return ()
    share = second_order.variance / first_order
    shift = second_order.shift_of_mean / math.sqrt(first_order)
    if abs(share) <= _MATTERS and abs(shift) <= _MATTERS:
        return ()
    detail = (
        f"the model curves within its uncertainty: terms of second order change the variance by "
        f"{100 * share:.1f} % and shift the mean by {shift:.2g} standard uncertainties; check the result by "
        "a Monte Carlo method"
    )
    return (EvaluationWarning("second-order-matters", detail),)
