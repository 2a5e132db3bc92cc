"""Formulas: read as Python reads the same text, computed as numpy computes, refused with a finger on the place."""

from __future__ import annotations

import ast
import warnings

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from classify.errors import SettingsError
from classify.features import FormulaError, parse_formula
from classify.features import program as programs
from classify.features.formula import FUNCTIONS
from classify.features.program import OPERATIONS, Call, Name, Node, Number, Program, Weighted

NAMES = ("nir", "red", "nir@2024_06", "swir_1")

# --- reading ---------------------------------------------------------------------------------------------------------

_PYTHON = {
    ast.Add: "add", ast.Sub: "subtract", ast.Mult: "multiply", ast.Div: "divide", ast.Pow: "power",
    ast.Lt: "less", ast.LtE: "less_equal", ast.Gt: "greater", ast.GtE: "greater_equal", ast.Eq: "equal",
    ast.NotEq: "not_equal", ast.And: "and", ast.Or: "or", ast.Not: "not", ast.USub: "negative",
}  # fmt: skip


def as_python_reads(text: str) -> Node:
    """Our tree of a text, by way of Python's own parser, which gives these signs the same strength."""

    def convert(node: ast.expr) -> Node:  # noqa: PLR0911 - one for each kind of node
        match node:
            case ast.BinOp(left, op, right):
                return Call(_PYTHON[type(op)], (convert(left), convert(right)))
            case ast.UnaryOp(ast.UAdd(), operand):
                return convert(operand)
            case ast.UnaryOp(op, operand):
                return Call(_PYTHON[type(op)], (convert(operand),))
            case ast.Compare(left, [op], [right]):
                return Call(_PYTHON[type(op)], (convert(left), convert(right)))
            case ast.BoolOp(op, values):
                tree = convert(values[0])
                for value in values[1:]:
                    tree = Call(_PYTHON[type(op)], (tree, convert(value)))
                return tree
            case ast.Call(ast.Name(name), arguments):
                return Call({"min": "min", "max": "max"}.get(name, name), tuple(map(convert, arguments)))
            case ast.Name(name):
                return Name(name.replace("_AT_", "@"))
            case ast.Constant(value):
                return Number(float(value))
        raise AssertionError(ast.dump(node))

    return convert(ast.parse(text.replace("^", "**").replace("@", "_AT_"), mode="eval").body)


@st.composite
def texts(draw: st.DrawFn, depth: int = 4) -> str:  # noqa: PLR0911 - one for each kind of text
    """Formulas with brackets where the dice say so, so that the strength of signs matters; comparisons in brackets."""
    kind = draw(st.sampled_from(["name", "number"] if depth == 0 else ["name", "number", *["made"] * 6]))
    if kind == "name":
        return draw(st.sampled_from(NAMES))
    if kind == "number":
        return draw(st.sampled_from(["2", "0.5", "1.", ".25", "3e-2", "10E1"]))
    inner = texts(depth=depth - 1)
    made = draw(st.sampled_from(["binary", "binary", "binary", "minus", "not", "compare", "logic", "call", "brackets"]))
    gap = draw(st.sampled_from(["", " ", "\n", " \t"]))
    match made:
        case "binary":
            return f"{draw(inner)}{gap}{draw(st.sampled_from('+-*/^'))}{gap}{draw(inner)}"
        case "minus":
            return f"-{gap}{draw(inner)}"
        case "not":
            return f"(not {draw(inner)})"
        case "compare":
            return f"({draw(inner)} {draw(st.sampled_from(['<', '<=', '>', '>=', '==', '!=']))} {draw(inner)})"
        case "logic":
            return f"({draw(inner)} {draw(st.sampled_from(['and', 'or']))} {draw(inner)})"
        case "call":
            return f"max({draw(inner)},{gap}{draw(inner)})"
    return f"({gap}{draw(inner)})"


@given(texts())
@settings(max_examples=120, deadline=None)
def test_formulas_are_read_as_python_reads_them(text):
    assert parse_formula(text).root == as_python_reads(" ".join(text.split()))


def test_names_come_once_in_order_with_their_place():
    formula = parse_formula("red / (nir@wet + red) - max(swir_1, pi)")
    assert formula.names == ("red", "nir@wet", "swir_1")
    assert formula.positions == {"red": 0, "nir@wet": 7, "swir_1": 28}


def test_a_date_goes_to_every_name_that_has_none():
    dated = parse_formula("(nir - red) / max(nir, red@dry)").on_date("wet")
    assert dated == parse_formula("(nir@wet - red@wet) / max(nir@wet, red@dry)")


BROKEN = [
    ("", 0, "empty"),
    ("nir +", 5, "ends where a value"),
    ("(nir", 0, "never closed"),
    ("nir)", 3, "never opened"),
    ("nir ** 2", 4, r"write \^"),
    ("nir = 2", 4, "write =="),
    ("nir & red", 4, "'and'"),
    ("nir − red", 4, "hyphen-minus"),
    ("2nir", 1, "runs into"),
    ("1.2.3", 3, "runs into"),
    ("0,5 * nir", 1, "decimals are written with a point"),
    ("nir red", 4, "operation .* is missing before 'red'"),
    ("nir < red < 2", 10, "do not chain"),
    ("sqr(nir)", 0, "did you mean sqrt"),
    ("__import__('os')", 11, "no meaning"),
    ("nir.real", 3, "no meaning"),
    ("where(nir, red)", 0, "takes 3 values, not 2"),
    ("min(nir)", 0, "at least 2"),
    ("log()", 0, "takes 1 value, not 0"),
    ("nir @ wet", 4, "a date follows a name"),
    ("1e39 * nir", 0, "too large"),
    ("nir and", 7, "ends where a value"),
    ("* nir", 0, r"not '\*'"),
    ("nir +\n  (red *)", 14, "value should stand here"),
]


@pytest.mark.parametrize(("text", "position", "reason"), BROKEN)
def test_an_error_points_at_the_character(text, position, reason):
    with pytest.raises(FormulaError, match=reason) as raised:
        parse_formula(text)
    assert raised.value.position == position
    assert isinstance(raised.value, SettingsError)
    line, caret = str(raised.value).split("\n")[-2:]
    if position < len(text):
        assert line[caret.index("^")] == text[position]


@pytest.mark.parametrize(
    "text", ["(" * 5000, "-" * 3000 + "nir", "nir" + " + nir" * 600, "(" * 150 + "nir" + ")" * 150]
)
def test_formulas_too_long_or_too_deep_are_refused(text):
    with pytest.raises(FormulaError, match="make several features"):
        parse_formula(text)


def test_a_long_line_is_shown_around_the_place():
    with pytest.raises(FormulaError) as raised:
        parse_formula("nir + " * 80 + "$ + red" + " + nir" * 80)
    line, caret = str(raised.value).split("\n")[-2:]
    assert len(line) < 120
    assert line[caret.index("^")] == "$"


@given(st.text(alphabet="nir+-*/^()<>=!,.@12 \nandwhe", max_size=40))
@settings(max_examples=400, deadline=None)
def test_any_text_is_read_or_refused_never_worse(text):
    try:
        formula = parse_formula(text)
    except FormulaError as error:
        assert 0 <= error.position <= len(text)
    else:
        assert formula.text == text


# --- computing -------------------------------------------------------------------------------------------------------


def finite(x):
    return np.where(np.isfinite(x), x, np.float32(np.nan)).astype(np.float32)


def where_all_valid(x, *operands):
    """The result where every operand is valid: numpy has comparisons, powers and maxima that forget NaN."""
    valid = np.logical_and.reduce([~np.isnan(operand) for operand in np.broadcast_arrays(*operands)])
    return np.where(valid, x, np.float32(np.nan)).astype(np.float32)


REFERENCE = {
    "add": np.add, "subtract": np.subtract, "multiply": np.multiply, "divide": np.divide, "negative": np.negative,
    "power": lambda a, b: np.square(a) if np.all(b == 2) else np.power(a, b),
    "less": np.less, "less_equal": np.less_equal, "greater": np.greater, "greater_equal": np.greater_equal,
    "equal": np.equal, "not_equal": np.not_equal, "and": np.logical_and, "or": np.logical_or, "not": np.logical_not,
    "min": lambda *a: np.minimum.reduce(np.broadcast_arrays(*a)),
    "max": lambda *a: np.maximum.reduce(np.broadcast_arrays(*a)),
    "mean": lambda *a: sum(a[1:], start=a[0]) / np.float32(len(a)),
    "abs": np.abs, "sign": np.sign, "sqrt": np.sqrt, "cbrt": np.cbrt, "log": np.log, "log10": np.log10, "exp": np.exp,
    "sin": np.sin, "cos": np.cos, "tan": np.tan, "asin": np.arcsin, "acos": np.arccos, "atan": np.arctan,
    "atan2": np.arctan2,
}  # fmt: skip


def as_numpy_computes(node, layers):
    """Operation by operation over whole arrays, each result made finite or NaN."""
    match node:
        case Name(name):
            return layers[name]
        case Number(value):
            return np.float32(value)
    values = [as_numpy_computes(argument, layers) for argument in node.arguments]
    if node.operation == "where":
        return where_all_valid(np.where(values[0] != 0, values[1], values[2]), values[0])
    return finite(where_all_valid(REFERENCE[node.operation](*values), *values))


@st.composite
def trees(draw: st.DrawFn, depth: int = 4) -> Node:
    if depth == 0 or draw(st.booleans()):
        numbers = st.sampled_from([0.0, 1.0, 2.0, -0.5, 3.5, 1e30]).map(Number)
        return draw(st.one_of(st.sampled_from(NAMES).map(Name), numbers))
    operation = draw(st.sampled_from(sorted(OPERATIONS)))
    least, most = FUNCTIONS.get(operation, (1 if operation in ("negative", "not") else 2,) * 2)
    arity = least if most is not None else draw(st.integers(least, 4))
    return Call(operation, tuple(draw(trees(depth=depth - 1)) for _ in range(arity)))


values = st.one_of(st.sampled_from([0.0, -0.0, 1.0, np.nan, 1e-30, 1e30, -1.0]), st.floats(-2, 2, width=32))
arrays = hnp.arrays(np.float32, (3, 7), elements=values)


@given(trees(), st.tuples(*[arrays] * len(NAMES)))
@settings(max_examples=120, deadline=None)
def test_formulas_compute_what_numpy_computes(tree, given_arrays):
    layers = dict(zip(NAMES, given_arrays, strict=True))
    out = np.empty((1, 3, 7), np.float32)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        Program.compile({"f": tree}, ["f"]).run(layers, out)
    with np.errstate(all="ignore"):
        expected = np.broadcast_to(as_numpy_computes(tree, layers), (3, 7))
    assert not np.isinf(out).any()
    np.testing.assert_array_equal(out[0], expected)


@given(st.lists(trees(), min_size=1, max_size=6), st.tuples(*[arrays] * len(NAMES)), st.integers(1, 30))
@settings(max_examples=50, deadline=None)
def test_many_results_share_buffers_without_spoiling_each_other(roots, given_arrays, piece):
    layers = dict(zip(NAMES, given_arrays, strict=True))
    names = [f"f{n}" for n in range(len(roots))]
    wanted = [*names, "red", *names[:2]]
    out = np.empty((len(wanted), 3, 7), np.float32)
    before = programs.PIECE_PX
    programs.PIECE_PX = piece
    try:
        Program.compile(dict(zip(names, roots, strict=True)), wanted).run(layers, out)
    finally:
        programs.PIECE_PX = before
    with np.errstate(all="ignore"):
        made = [np.broadcast_to(as_numpy_computes(root, layers), (3, 7)) for root in roots]
    np.testing.assert_array_equal(out, np.stack([*made, layers["red"], *made[:2]]))


def test_definitions_build_on_each_other_and_on_replaced_layers():
    layers = {name: np.full((2, 2), value, np.float32) for name, value in (("a", 2.0), ("b", 3.0), ("c", 7.0))}
    definitions = {"d": parse_formula("a + b").root, "e": parse_formula("d * c").root}
    out = np.empty((3, 2, 2), np.float32)
    # a is replaced by 10 + a - b = 9 over the layers as they are read, even where b is replaced too.
    replaced = {"b": Weighted(("a",), (0.5,)), "a": Weighted(("a", "b"), (1.0, -1.0), 10.0)}
    Program.compile(definitions, ["e", "a", "d"], replaced).run(layers, out)
    assert out[:, 0, 0].tolist() == [(9 + 1) * 7, 9, 10]


def test_cropping_leaves_out_the_edges():
    layer = np.arange(80, dtype=np.float32).reshape(8, 10)
    out = np.empty((1, 4, 6), np.float32)
    Program.compile({"f": parse_formula("2 * x").root}, ["f"]).run({"x": layer}, out, crop_px=2)
    np.testing.assert_array_equal(out[0], 2 * layer[2:-2, 2:-2])


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("1 / zero", np.nan),  # not infinite
        ("1 / (1 / zero)", np.nan),  # nor hidden by what follows
        ("zero / zero", np.nan),
        ("log(zero - 1)", np.nan),
        ("log(zero)", np.nan),
        ("sqrt(zero - 1)", np.nan),
        ("exp(1000 + zero)", np.nan),
        ("atan(1 / zero)", np.nan),
        ("1 / zero > 3", np.nan),
        ("hole > 3", np.nan),
        ("hole == hole", np.nan),
        ("hole ^ 0", np.nan),
        ("max(hole, 2)", np.nan),
        ("not hole", np.nan),
        ("where(hole, 1, 2)", np.nan),
        ("where(zero, hole, 2)", 2.0),  # what is not chosen does not matter
        ("where(zero == 0, 3, hole)", 3.0),
        ("zero == 0 and not (zero > 1)", 1.0),
        ("-2 ^ 2 + zero", -4.0),
        ("2 ^ 3 ^ 2 + zero", 512.0),
        ("2 ^ -1 + zero", 0.5),
        ("cbrt(zero - 8)", -2.0),
        ("mean(1, 2, 6 + zero)", 3.0),
        ("sin(pi / 6 + zero)", 0.5),
        ("atan2(1 + zero, 1)", np.pi / 4),
    ],
)
def test_values_worked_by_hand(text, expected):
    layers = {"zero": np.zeros((1, 3), np.float32), "hole": np.full((1, 3), np.nan, np.float32)}
    result = parse_formula(text).evaluate(layers)
    assert result.dtype == np.float32
    np.testing.assert_allclose(result, np.full((1, 3), expected), rtol=1e-6)
