"""Arithmetic on columns: exact against Python's Fraction, and closed to everything else."""

from __future__ import annotations

import pickle
import time
import warnings
from decimal import Decimal
from fractions import Fraction

import pytest
from flint import fmpq
from hypothesis import given
from hypothesis import strategies as st

from loopint.core.errors import InputError
from loopint.pipeline.expressions import MAX_BITS, parse_expression

NAMES = ("a", "m_b", "my col", "µ", "lambda")


def to_fraction(value: fmpq) -> Fraction:
    return Fraction(int(value.p), int(value.q))


def to_fmpq(value: Fraction) -> fmpq:
    return fmpq(value.numerator, value.denominator)


# ---------------------------------------------------------------- random trees

Tree = tuple  # ("num", text) | ("col", name) | (op, left, right) | ("neg", x) | ("**", x, n)

LEAVES = st.one_of(
    st.tuples(st.just("num"), st.integers(0, 10**6).map(str)),
    st.tuples(
        st.just("num"),
        st.decimals("0", "1000", allow_nan=False, places=6).map(str),
    ),
    st.tuples(st.just("num"), st.sampled_from(["1e-3", "2.5E+2", "1_000", ".5", "7."])),
    st.tuples(st.just("col"), st.sampled_from(NAMES)),
)
TREES = st.recursive(
    LEAVES,
    lambda inner: st.one_of(
        st.tuples(st.sampled_from("+-*/"), inner, inner),
        st.tuples(st.sampled_from(["neg", "pos"]), inner),
        st.tuples(st.just("**"), inner, st.integers(-3, 4)),
    ),
    max_leaves=12,
)
CELLS = st.fractions(min_value=-50, max_value=50, max_denominator=40)


def written(tree: Tree) -> str:
    match tree:
        case ("num", text):
            return text
        case ("col", name):
            return name if name in ("a", "m_b", "µ") else f"`{name}`"
        case ("neg", inner):
            return f"(-{written(inner)})"
        case ("pos", inner):
            return f"(+ {written(inner)})"
        case ("**", inner, power):
            return f"({written(inner)})**{power}"
        case (op, left, right):
            return f"({written(left)} {op} {written(right)})"
    raise AssertionError(tree)


def value(tree: Tree, cells: dict[str, Fraction]) -> Fraction:
    match tree:
        case ("num", text):
            return Fraction(Decimal(text.replace("_", "")))
        case ("col", name):
            return cells[name]
        case ("neg", inner):
            return -value(inner, cells)
        case ("pos", inner):
            return value(inner, cells)
        case ("**", inner, power):
            return value(inner, cells) ** power
        case ("+", left, right):
            return value(left, cells) + value(right, cells)
        case ("-", left, right):
            return value(left, cells) - value(right, cells)
        case ("*", left, right):
            return value(left, cells) * value(right, cells)
        case ("/", left, right):
            return value(left, cells) / value(right, cells)
    raise AssertionError(tree)


@given(TREES, st.fixed_dictionaries(dict.fromkeys(NAMES, CELLS)))
def test_agrees_with_fractions(tree: Tree, cells: dict[str, Fraction]) -> None:
    try:
        expected = value(tree, cells)
    except ZeroDivisionError:
        with pytest.raises(InputError, match="division by zero in "):
            parse_expression(written(tree)).evaluate({k: to_fmpq(v) for k, v in cells.items()})
        return
    parsed = parse_expression(written(tree))
    assert to_fraction(parsed.evaluate({k: to_fmpq(v) for k, v in cells.items()})) == expected
    assert parsed.columns <= set(NAMES)
    if not parsed.columns:
        assert to_fraction(parsed.constant) == expected
    assert pickle.loads(pickle.dumps(parsed)) == parsed


@given(st.lists(st.sampled_from("+-*/"), min_size=1, max_size=8), st.data())
def test_precedence_is_that_of_written_mathematics(
    operators: list[str], data: st.DataObject
) -> None:
    numbers = [data.draw(st.integers(1, 9)) for _ in range(len(operators) + 1)]
    text = str(numbers[0]) + "".join(
        f"{op}{n}" for op, n in zip(operators, numbers[1:], strict=True)
    )
    terms: list[Fraction] = [Fraction(numbers[0])]
    for op, n in zip(operators, numbers[1:], strict=True):
        match op:
            case "+":
                terms.append(Fraction(n))
            case "-":
                terms.append(Fraction(-n))
            case "*":
                terms[-1] *= n
            case "/":
                terms[-1] /= n
    assert to_fraction(parse_expression(text).constant) == sum(terms)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("0.1", fmpq(1, 10)),  # not the nearest double
        ("0.1 + 0.2", fmpq(3, 10)),
        ("1/3", fmpq(1, 3)),
        ("-2**2", fmpq(-4)),
        ("(-2)**2", fmpq(4)),
        ("2**-2", fmpq(1, 4)),
        ("2**+3", fmpq(8)),
        ("2**(3)", fmpq(8)),
        ("1e-30", fmpq(1, 10**30)),
        ("1_000.5", fmpq(2001, 2)),
        ("  1 +\n\t1 ", fmpq(2)),
        ("10**-20", fmpq(1, 10**20)),
        (Decimal("0.1"), fmpq(1, 10)),
        (Decimal("-1E+3"), fmpq(-1000)),
        (-7, fmpq(-7)),
    ],
)
def test_constants_are_exact(text: object, expected: fmpq) -> None:
    parsed = parse_expression(text)
    assert parsed.constant == expected
    assert parsed.columns == frozenset()
    assert parsed.evaluate({}) == expected


def test_odd_column_names() -> None:
    parsed = parse_expression("`m (GeV)`**2 - `lambda`*`m (GeV)` + quoted_0_ + µ")
    assert parsed.columns == {"m (GeV)", "lambda", "quoted_0_", "µ"}
    cells = {"m (GeV)": 3, "lambda": 5, "quoted_0_": 100, "µ": 1000}
    assert parsed.evaluate({k: fmpq(v) for k, v in cells.items()}) == 9 - 15 + 100 + 1000
    # U+00B5 (micro sign) and U+03BC (mu) look alike; the written one is the column asked for
    assert parse_expression("\u00b5").columns == {"\u00b5"}
    assert parse_expression("\u03bc").columns == {"\u03bc"}
    # white space inside backquotes belongs to the name, and survives a second parse
    spaced = parse_expression("`a  b`  +   1")
    assert spaced.columns == {"a  b"}
    assert parse_expression(spaced.text) == spaced


@pytest.mark.parametrize(
    "text",
    [
        "", "   ", "m_a +", "(m_a", "m_a)", "m_a m_b", "1 2", "3m", "a,b", "a;b", "a = 1", "a := 1",
        "(a := 1)", "a # b", "`a", "``", "a`b`", "\0", "a\\\nb", "a + é@", "lambda", "1if", "1__0",
        "00012",
    ],
)  # fmt: skip
def test_malformed_text_is_refused_in_one_sentence(text: str) -> None:
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        with pytest.raises(InputError, match=r"accepted: numbers, column names") as caught:
            parse_expression(text)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    "text",
    [
        "__import__('os').system('true')", "sqrt(a)", "a.b", "a[0]", "'a'", '"a"', "f'{a}'", "b'a'",
        "1j", "a + 2j", "True", "None", "...", "a if b else c", "a and b", "not a", "~a", "a < b",
        "a == b", "[a]", "(a, b)", "{a}", "{a: b}", "lambda: 1", "[x for x in a]", "a // b",
        "a % b", "a @ b", "a << 2", "a | b", "a & b", "*a", "await a", "(yield)",
    ],
)  # fmt: skip
def test_nothing_but_arithmetic(text: str) -> None:
    with pytest.raises(InputError, match="accepted: numbers, column names"):
        parse_expression(text)


@pytest.mark.parametrize("text", ["0x10", "0b1", "0o7", "a + 0xFF"])
def test_only_decimal_numbers(text: str) -> None:
    with pytest.raises(InputError, match="is not a number"):
        parse_expression(text)


def test_caret_is_explained() -> None:
    with pytest.raises(InputError, match=r"'a\^2' uses \^; accepted: \*\* for a power"):
        parse_expression("a^2")


@pytest.mark.parametrize(
    "text", ["a**0.5", "a**b", "a**65", "a**-65", "a**(1/2)", "2**1e1", "a**(1+1)", "a**True"]
)
def test_exponents_are_small_written_integers(text: str) -> None:
    with pytest.raises(InputError, match="a written integer from -64 to 64"):
        parse_expression(text)


@pytest.mark.parametrize("number", [True, Decimal("NaN"), Decimal("-Infinity"), None, [1], 1j])
def test_other_objects_are_refused(number: object) -> None:
    with pytest.raises(InputError, match="accepted"):
        parse_expression(number)


@pytest.mark.parametrize(
    ("text", "shown"),
    [
        ("m_p/(m_a - m_b)", r"m_p/\(m_a - m_b\)"),
        ("1 + (m_a - m_b)**-2", r"\(m_a - m_b\)\*\*-2"),
        ("1/(`m a` - m_b)", r"1/\( ?`m a` - m_b\)"),
    ],
)
def test_division_by_zero_in_a_row_shows_where(text: str, shown: str) -> None:
    parsed = parse_expression(text)  # fine until a row makes it divide by zero
    cells = {"m_p": fmpq(1), "m_a": fmpq(1, 3), "m a": fmpq(1, 3), "m_b": fmpq(1, 3)}
    with pytest.raises(
        InputError, match=f"^division by zero in {shown}; accepted: a divisor other than 0$"
    ):
        parsed.evaluate(cells)
    assert parsed.evaluate(cells | {"m_b": fmpq(1, 4)}) > 0


@pytest.mark.parametrize(
    "text", ["1/0", "a/(2-2)", "a + 0**-1", "(a + 1/(0.1*3 - 0.3))*b", "a/0.0"]
)
def test_division_by_a_fixed_zero_is_found_when_parsing(text: str) -> None:
    with pytest.raises(InputError, match="division by zero in "):
        parse_expression(text)


@pytest.mark.parametrize(
    "text",
    [
        "9**9**9",
        "(((((10**64)**64)**64)**64)**64)**64",
        "(((99**64)**64)**64)*a",
        "1e9999**64",
        "1e999999999",
        "1e99999999999999999999999",
        "-" * 1900 + "a",
        "(" * 900 + "a" + ")" * 900,
        "+".join("a" * 500),
        "a*" * 60 + "a",
        "a" * 2001,
        "(" * 1500,
        "[" * 1500,
        "~" * 1999,
    ],
)
def test_hostile_text_is_refused_fast(text: str) -> None:
    started = time.perf_counter()
    with pytest.raises(InputError) as caught:
        parse_expression(text)
    assert time.perf_counter() - started < 1
    assert len(str(caught.value)) < 400


def test_growth_in_a_row_is_bounded_before_it_happens() -> None:
    parsed = parse_expression("((a**64)**64)**2")
    assert parsed.evaluate({"a": fmpq(-1)}) == 1
    started = time.perf_counter()
    with pytest.raises(InputError, match=f"accepted: at most {MAX_BITS}"):
        parsed.evaluate({"a": fmpq(3) ** 4000})
    assert time.perf_counter() - started < 0.1


@given(TREES, st.fixed_dictionaries(dict.fromkeys(NAMES, CELLS)))
def test_size_bound_holds(tree: Tree, cells: dict[str, Fraction]) -> None:
    """The bound that is compared with the limit is never below the size of the result."""
    try:
        parsed = parse_expression(written(tree))
        found = parsed.evaluate({k: to_fmpq(v) for k, v in cells.items()})
    except InputError:
        return
    longest = max(to_fmpq(v).height_bits() for v in cells.values())
    node = parsed._node
    assert found.height_bits() <= node.offset + node.degree * longest


def test_depth_and_length_limits_leave_room_for_real_formulas() -> None:
    kallen = "(p - a - b)**2 - 4*a*b"
    parsed = parse_expression(f"({kallen})/(4*p) + " + " + ".join(["a"] * 40))
    cells = {"p": fmpq(7), "a": fmpq(2), "b": fmpq(1, 2)}
    assert parsed.evaluate(cells) == fmpq(81, 4 * 28) - fmpq(4, 28) + 80
