import inspect

import pytest

from budgets import errors
from budgets.errors import (
    BudgetsError,
    ComponentError,
    ConvergenceError,
    EmptyAcceptanceError,
    EvidenceError,
    LimitsError,
    NotSupportedError,
    raise_collected,
)


def test_faults_of_arguments_are_value_errors():
    tree = [item for _, item in inspect.getmembers(errors, inspect.isclass) if issubclass(item, BudgetsError)]
    assert {item for item in tree if not issubclass(item, ValueError)} == {BudgetsError, ConvergenceError}


def test_every_class_of_the_tree_is_drawn_in_the_module():
    tree = [
        name for name, item in inspect.getmembers(errors, inspect.isclass) if issubclass(item, BudgetsError)
    ]
    assert all(name in errors.__doc__ for name in tree)


def test_under_moves_the_paths_of_all_faults():
    single = EvidenceError("bad", where=("level",))
    error = ComponentError("two faults", where=("x",), faults=[single])
    assert error.under("components", 2) is error
    assert error.where == ("components", 2, "x")
    assert error.each() == (single,)
    assert single.where == ("components", 2, "level")
    assert single.each() == (single,)


def test_nothing_collected_raises_nothing_and_one_fault_is_raised_itself():
    raise_collected([])
    single = EvidenceError("bad")
    with pytest.raises(EvidenceError) as caught:
        raise_collected([single])
    assert caught.value is single


def test_many_faults_are_carried_by_one_error_up_to_twenty():
    with pytest.raises(EvidenceError, match="25 faults, the first: number 0") as caught:
        raise_collected([EvidenceError(f"number {i}") for i in range(25)])
    assert len(caught.value.each()) == 20


def test_an_empty_acceptance_interval_is_collected_as_a_fault_of_limits():
    empty = EmptyAcceptanceError("nothing left", capability_index=0.5, remedy="measure better")
    with pytest.raises(LimitsError) as caught:
        raise_collected([empty, LimitsError("and this")])
    assert caught.value.each()[0] is empty


def test_not_supported_says_so_once():
    error = NotSupportedError("a relative figure")
    assert error.message == "not supported yet: a relative figure"
    with pytest.raises(NotSupportedError) as caught:
        raise_collected([error, error])
    assert caught.value.message.startswith("not supported yet: 2 faults")
