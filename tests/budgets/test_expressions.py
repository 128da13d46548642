"""What an expression may hold, and that everything else is refused with its path."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from budgets.errors import ModelError
from budgets.expressions import GREATEST_DEPTH, LONGEST_TEXT, MOST_STEPS, is_name, parse


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "empty"),
        ("   ", "empty"),
        ("1 + 2", "names no quantity"),
        ("x +", "cannot be read"),
        ("y", "'y', which is no quantity"),
        ("x" + "+x" * LONGEST_TEXT, "longer than"),
        ("-" * 1500 + "x", None),
        ("(" * 999 + "x" + ")" * 999, "cannot be read"),
        ("+".join(f"{i}*x" for i in range(2, MOST_STEPS)), None),
        ("x**1e999", "too large"),
        ("x*" + "9" * 400, "too large"),
        ("x if x else x", "IfExp"),
        ("x and x", "BoolOp"),
        ("not x", "UnaryOp"),
        ("x is x", "Compare"),
        ("x // x", "//"),
        ("(x, x)", "Tuple"),
        ("*x", "cannot be read"),
        ("True*x", "a part of the kind Constant"),
        ("x.real", "attribute"),
        ("x.__class__.__mro__", "attribute"),
        ("x(1)", "this call is not arithmetic; the functions are sqrt"),
        ("open(x)", "this call"),
        ("sin(x)(x)", "this call"),
        ("sin(x, x)", "one argument"),
        ("sin()", "one argument"),
        ("min(x)", "two or more"),
        ("max(*x, x)", "Starred"),
        ("x[0]", "something else"),
        ("__import__('os')", "not arithmetic"),
        ("x = 1", "something else"),
        ("x:=1", "something else"),
        ("min(x, key=x)", "something else"),
        ("x % 2", "something else"),
        ("x < 2", "something else"),
        ("1j*x", "something else"),
        ("0x10*x", "something else"),
        ("1_000*x", "something else"),
        ("1if x", "something else"),
        ("x\u00b2", "something else"),
        ("lambda: x", "something else"),
    ],
)
def test_what_is_not_arithmetic_is_refused(text, message):
    with pytest.raises(ModelError, match=message) as caught:
        parse(text, ("x",))
    assert caught.value.where == ("expression",)


def test_depth_is_bounded():
    within = "sin(" * (GREATEST_DEPTH - 1) + "x" + ")" * (GREATEST_DEPTH - 1)
    assert len(parse(within, ("x",)).steps) == GREATEST_DEPTH
    with pytest.raises(ModelError, match="nested deeper"):
        parse(f"sin(sin({within}))", ("x",))


def test_the_number_of_operations_is_bounded():
    with pytest.raises(ModelError, match=r"nested deeper"):
        parse("+".join(f"x*{i}" for i in range(2, 110)), ("x",))
    balanced = ["x*" + str(i) for i in range(2, 152)]
    while len(balanced) > 1:
        pairs = [balanced[i : i + 2] for i in range(0, len(balanced), 2)]
        balanced = ["(" + "+".join(pair) + ")" for pair in pairs]
    with pytest.raises(ModelError, match=r"more than 400 operations"):
        parse(balanced[0].replace(" ", ""), ("x",))


def test_equal_parts_are_one_step():
    expression = parse("(x+1)*(x+1) - +y", ("x", "y"))
    assert [step.operation for step in expression.steps] == ["name", "number", "+", "*", "name", "-"]
    assert expression.names == ("x", "y")


@pytest.mark.parametrize("text", ["1.5e3*x", ".5*x", "2.*x", "x1a*x", "min(x, x1a, 2)", "x ** -2"])
def test_ordinary_arithmetic_is_read(text):
    assert "x" in parse(text, ("x", "x1a")).names


@pytest.mark.parametrize(
    ("text", "names"),
    [
        ("'free-fat' - x", ("free-fat", "x")),
        ("x/('free-fat'/100)", ("x", "free-fat")),
        ("free-fat", ("free", "fat")),
        ("'x' + 1", ("x",)),
        ("'2-mcpd' * 2", ("2-mcpd",)),
    ],
)
def test_quotes_tell_a_name_with_a_hyphen_from_a_difference(text, names):
    assert parse(text, ("x", "free", "fat", "free-fat", "2-mcpd")).names == names


@pytest.mark.parametrize("text", ["'fat", "'fat'x", "''", "x + 'free fat'", "'free-fat'(x)", '"x"'])
def test_what_is_not_quoted_as_it_should_is_refused(text):
    with pytest.raises(ModelError):
        parse(text, ("x", "fat", "free-fat"))


@pytest.mark.parametrize(
    ("text", "right"),
    [
        ("moisture", True),
        ("x_1", True),
        ("_", True),
        ("1x", True),
        ("solids-not-fat", True),
        ("-x", False),
        ("x'y", False),
        ("a b", False),
        ("if", False),
        ("ln", False),
    ],
)
def test_names_of_quantities(text, right):
    assert is_name(text) is right


@given(st.text(alphabet="x.()+-*/,1e _:'\"[]=lambdf", max_size=40))
def test_any_text_is_read_or_refused(text):
    """Whatever is typed ends in an expression or in a ModelError, never in another error."""
    try:
        assert parse(text, ("x",)).steps
    except ModelError as error:
        assert error.where == ("expression",)
