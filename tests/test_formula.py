"""What a formula may say, what it means, and that nothing else gets through."""

from __future__ import annotations

import contextlib
import copy
import pickle
import time

import pytest
from formulaic.transforms import TRANSFORMS
from hypothesis import given, settings
from hypothesis import strategies as st

from addmodel.errors import FormulaError
from addmodel.expression import parse_expression
from addmodel.formula import find, parse


def refusal(text: object) -> str:
    with pytest.raises(FormulaError) as caught:
        parse(text)  # type: ignore[arg-type]
    return str(caught.value)


# What is read ----------------------------------------------------------------------------------


def test_a_formula_of_every_kind_is_read_in_the_order_written():
    text = (
        "log(y) ~ zeta + curve( log(dose) , detail = 20) + C(site, base='largest') + a\n"
        "   + cycle(hour, df=3, period=24.0) + {x/2} + `body mass` + curve(`body mass`)"
    )
    model = parse(text)
    assert model.text == text
    assert (model.outcome.text, model.outcome.names, model.outcome.span) == (
        *("log(y)", ("y",), (0, 6)),
    )
    assert [term.name for term in model.terms] == [
        "zeta",
        "curve(log(dose))",
        "C(site, base='largest')",
        "a",
        "cycle(hour, period=24)",
        "{x / 2}",
        "`body mass`",
        "curve(`body mass`)",
    ]
    factors = [term.factors[0] for term in model.terms]
    assert [f.kind for f in factors] == [
        *("plain", "curve", "levels", "plain", "cycle", "plain", "plain", "curve")
    ]
    assert factors[1].options == {"detail": 20}
    assert factors[1].arguments[0].names == ("dose",)
    assert factors[4].options == {"period": 24.0, "df": 3.0}
    assert factors[6].arguments[0].text == "body mass"
    places = [text[slice(*term.span)] for term in model.terms]
    assert places[1] == "curve( log(dose) , detail = 20)"
    assert places[5:] == ["{x/2}", "`body mass`", "curve(`body mass`)"]
    argument = factors[7].arguments[0]
    assert text[slice(*argument.span)] == "`body mass`"


def test_names_can_stand_in_a_formula_again():
    model = parse(
        "y ~ {x/2} + `a b` + C(`a b`, base='(') + class + curve(-x) + cycle(d, period='day')"
    )
    again = parse("y ~ " + " + ".join(term.name for term in model.terms))
    assert again.terms == model.terms


def test_options_are_read_only_and_terms_are_values():
    one, two = parse("y ~ curve(x, detail=5)"), parse("y  ~  curve( x,detail=5 )")
    assert one.terms == two.terms
    assert hash(one.terms) == hash(two.terms)
    with pytest.raises(TypeError):
        one.terms[0].factors[0].options["detail"] = 6  # type: ignore[index]
    assert pickle.loads(pickle.dumps(one)) == copy.deepcopy(one) == one


@pytest.mark.parametrize(
    ("text", "names"),
    [
        ("y ~ 1", []),
        ("y ~ 1 + x", ["x"]),
        ("y ~ x + x + curve(x) + curve( x )", ["x", "curve(x)"]),
        ("y ~ (b + a) - b", ["a"]),
        ("y ~ log(x) + `log(x)`", ["log(x)", "`log(x)`"]),  # the second is a column
        ("y ~ `1`", ["`1`"]),
        ("y ~ open + eval + é + µ", ["open", "eval", "é", "µ"]),
        ("y ~ curve(µ)", ["curve(µ)"]),  # MICRO SIGN, which Python turns into GREEK MU
        ("y ~ e\u0301 + उम्र + {A\U0001e01b}", ["e\u0301", "उम्र", "A\U0001e01b"]),
        ("y ~ {℘} + curve(℘)", ["`℘`", "curve(`℘`)"]),
        ("y ~ cycle(h, period=24) + cycle(h, period=168)", None),
        ("y ~ C(x, base=1)", ["C(x, base=1)"]),
        ("y ~ C(x, base=-1.50)", ["C(x, base=-1.5)"]),
        ("y ~ {curve(x)}", ["curve(x)"]),
    ],
)
def test_what_the_algebra_makes_of_it(text, names):
    model = parse(text)
    if names is None:
        assert len(model.terms) == 2
    else:
        assert [term.name for term in model.terms] == names


# What is refused -------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "says", "marks"),
    [
        (3, "text is expected, not int", None),
        ("  ", "nothing is written", None),
        ("y ~ x\0", "character 6 cannot be printed", None),
        ("y ~ \ud800", "character 5 cannot be printed", None),
        ("y ~ " + "x" * 10_000, "characters are too many", None),
        ("y + x", "one ~, between the outcome and the terms", None),
        ("y ~ x ~ z", "one ~", "~"),
        ("~ x", "the outcome before the ~", "~"),
        ("y ~", "For a model of the intercept alone write y ~ 1", "~"),
        ("y ~ x | z", "| has no meaning here", "|"),
        ("y ~ .", "Name the columns", "."),
        ("y ~ x - 1", "The intercept always stays", "1"),
        ("y ~ 0 + x", "The intercept always stays", "0"),
        ("y ~ x + 0", "The intercept always stays", "0"),
        ("y ~ x - (1 + z)", "The intercept always stays", None),
        ("y ~ 50:a", "50 cannot be a term", "50"),
        ("y ~ x + 2", "2 cannot be a term", "2"),
        ("y ~ x / 2", "Arithmetic stands in braces, as in {x / 2}", "2"),
        ("y ~ 1 / x", "1 is the intercept", "1"),
        ("y ~ (1 + a):b", "no part in a product", "b"),
        ("y ~ x ** 2", "{x ** 2}", "x **"),
        ("y ~ (a + b) ** c", "whole number from 1 to 99", "c"),
        ("y ~ a - x", "x is taken away, but no term has it", "x"),
        ("y ~ 'a'", "' has no meaning here", "'"),
        ("y ~ x > 3", "stand in braces", ">"),
        ("y ~ x z", "operator such as + is missing between x and z", "x z"),
        ("y ~ x + * z", "operator or a bracket is misplaced", "+ *"),
        ("y ~ (x", "operator or a bracket is misplaced", "("),
        ("y ~ x)", "operator or a bracket is misplaced", ")"),
        ("y ~ curve(x", "never closed", "("),
        ("y + z ~ x", "The outcome is one column or one expression", "y + z"),
        ("y/n ~ x", "{cases / people}", "y/n"),
        ("curve(y) ~ x", "The outcome is a column or an expression", "curve(y)"),
        ("y ~ x + curve(x) + curve(x, detail=5)", "same term with different options", None),
        ("y ~ (a+b+c+d) ** 99", "more than 1,000 terms", None),
        ("y ~ bs(x)", "bs() is not something a formula can call. A term is one of", "bs(x)"),
        ("y ~ place(u)", "place() takes two coordinates of one unit, then options", "place(u)"),
        ("y ~ group()", "group() takes one column or more, then options", "group()"),
        ("y ~ curve(x, order=4)", "order= is 1, 2 or 3", "order=4"),
        ("y ~ np.log(x)", "np.log() is not something a formula can call", "np.log(x)"),
        ("y ~ __import__('os')", "__import__ is not a name", "__import__"),
        ("y ~ a.b", "stands in backticks, as in `a.b`", "a.b"),
        ("y ~ log(x.__class__)", "A dot has no meaning here", "x.__class__"),
        ("y ~ x[0]", "not allowed in an expression. An expression is made of columns", "x[0]"),
        ("y ~ {lambda: x}", "not allowed in an expression", "lambda: x"),
        ("y ~ {[i for i in x]}", "not allowed in an expression", "[i for i in x]"),
        ("y ~ log((x := 1))", "not allowed in an expression", "x := 1"),
        ("y ~ {f'{x}'}", "not allowed in an expression", "f'{x}'"),
        ("y ~ {x + 'a'}", "not allowed in an expression", "'a'"),
        ("y ~ {x & z}", "not allowed in an expression", "x & z"),
        ("y ~ {x and z}", "not allowed in an expression", "x and z"),
        ("y ~ log(x, 2)", "log() takes one value", "log(x, 2)"),
        ("y ~ minimum(x)", "minimum() takes two values", "minimum(x)"),
        ("y ~ log(2)", "No column is named here", "log(2)"),
        ("y ~ {}", "cannot be read", "{}"),
        ("y ~ curve(class)", "stands in backticks: `class`", "curve(class)"),
        ("y ~ log(``)", "backticks is empty", "``"),
        ("y ~ {a`b`}", "backticks is empty or misplaced", "a`b`"),
        ("y ~ curve(curve(x))", "curve() is a term", None),
        ("y ~ log(é) + log(curve(x))", "curve() is a term", "curve(x)"),
        ("y ~ curve()", "takes one column or expression", "curve()"),
        ("y ~ curve(x, 20)", "options by name: order=, detail=, smoothing=, df=", "curve(x, 20)"),
        ("y ~ curve(x, detial=3)", "Did you mean 'detail'?", "detial=3"),
        ("y ~ curve(x, **k)", "has no option", "**k"),
        ("y ~ curve(x, detail=0)", 'at least 1, or "all"', "detail=0"),
        ("y ~ curve(x, detail=2.5)", 'at least 1, or "all"', "detail=2.5"),
        ("y ~ curve(x, detail=True)", 'at least 1, or "all"', "detail=True"),
        ("y ~ curve(x, detail=k)", 'at least 1, or "all"', "detail=k"),
        ("y ~ curve(x, detail=-'all')", 'at least 1, or "all"', "detail=-'all'"),
        ("y ~ curve(x, smoothing=0)", "smoothing= is a positive number", "smoothing=0"),
        ("y ~ curve(x, smoothing=1e999)", "positive number", "smoothing=1e999"),
        ("y ~ curve(x, df=1)", "df= is a number above 1", "df=1"),
        ("y ~ curve(x, df='a')", "df= is a number above 1", "df='a'"),
        ("y ~ curve(x, df=3, smoothing=1)", "Give one of them", None),
        ("y ~ curve(x, df=3, df=4)", "df= is given twice", "df=4"),
        ("y ~ cycle(h)", "needs its period: cycle(h, period=...)", "cycle(h)"),
        ("y ~ cycle(h, period=-24)", '"year", "month", "week" or "day"', "period=-24"),
        ("y ~ cycle(h, period='decade')", '"year", "month"', "period='decade'"),
        ("y ~ C(x, base=None)", "a level", "base=None"),
        ("y ~ C(x, df=3)", "C() has no option 'df'", "df=3"),
    ],
)
def test_a_refusal_says_what_and_where(text, says, marks):
    message = refusal(text)
    assert says in message
    assert "\x1b" not in message
    assert "⧛" not in message
    if marks is not None:
        assert f">>{marks}<<" in message


def test_the_same_term_with_two_settings_names_both():
    message = refusal("y ~ curve(x) + curve( x, detail=5)")
    assert message.startswith("curve(x) and curve( x, detail=5) are the same term")
    assert message.endswith("y ~ curve(x) + >>curve( x, detail=5)<<")


def test_the_parsers_own_error_is_kept_as_the_cause():
    with pytest.raises(FormulaError) as caught:
        parse("y ~ x + * z")
    assert type(caught.value.__cause__).__module__.startswith("formulaic")
    assert caught.value.span == (6, 9)


@pytest.mark.parametrize("name", sorted(TRANSFORMS))
def test_none_of_the_parsers_own_functions_can_be_called(name):
    if name in ("C", "log", "log2", "log10", "exp"):  # the same names, our own meaning
        assert parse(f"y ~ {name}(x)").terms[0].name == f"{name}(x)"
    else:
        assert f"{name}() is not something a formula can call" in refusal(f"y ~ {name}(x)")
        assert f"{name}() is not something a formula can call" in refusal(f"y ~ curve({name}(x))")
        assert f"{name}() is not something a formula can call" in refusal(f"{name}(y) ~ x")


@pytest.mark.parametrize(
    "right",
    [
        "(" * 4000 + "x" + ")" * 4000,
        "{" + "(" * 4000 + "x" + ")" * 4000 + "}",
        "{" + "-" * 9000 + "x}",
        "{" + "-" * 400 + "x}",
        "{x" + "+x" * 400 + "}",
        "{x" + "**x" * 3000 + "}",
        "curve(" * 60 + "x" + ")" * 60,
        "curve(x" + "[0]" * 3000 + ")",
        "a" + ".b" * 3000,
        "a" + ":b" * 4000,
        "+".join(f"x{i}" for i in range(1500)),
        "*".join(f"x{i}" for i in range(40)),
        "(a+b+c)**99",
        "curve(x, detail=" + "9" * 9000 + ")",
    ],
)
def test_depth_and_size_are_refused_quickly(right):
    start = time.perf_counter()
    refusal("y ~ " + right)
    assert time.perf_counter() - start < 5


PIECES = [
    *("y", "x", "é", "class", "lambda", "__", "1", "0", "2", "curve(", "C(", "cycle(", "log("),
    *("(", ")", "{", "}", "[", "]", "+", "-", "*", "/", ":", "**", "~", "`", "'", '"', ",", "="),
    *(".", "\\", "#", "|", "%", ">", " ", "\n", "period=", "'day'", "detail="),
]


@settings(max_examples=100, deadline=None)
@given(
    st.one_of(
        st.text(max_size=40),
        st.lists(
            st.sampled_from(PIECES),
            max_size=14,
        ).map("".join),
    )
)
def test_any_text_is_read_or_refused(text):
    for formula in (text, "y ~ " + text, "y ~ curve(" + text + ")", "y ~ {" + text + "}"):
        try:
            model = parse(formula)
        except FormulaError:
            continue
        again = parse("y ~ " + (" + ".join(term.name for term in model.terms) or "1"))
        assert [term.name for term in again.terms] == [term.name for term in model.terms]
    for reader in (
        lambda: parse_expression(text, "weights"),
        lambda: find(text, ["x", "curve(x)"]),
    ):
        with contextlib.suppress(FormulaError):
            reader()


# Finding a term --------------------------------------------------------------------------------

NAMES = [
    *("Intercept", "x", "curve(x)", "curve(temp)", "cycle(hour, period=24)", "`body mass`"),
    *("cycle(day, period=7)", "cycle(day, period=365)", "{x / 2}", "C(site, base='a')", "log(x)"),
]


@pytest.mark.parametrize(
    ("typed", "name"),
    [
        ("Intercept", "Intercept"),
        ("x", "x"),
        ("curve( temp )", "curve(temp)"),
        ("curve(temp, detail=9)", "curve(temp)"),
        ("temp", "curve(temp)"),
        ("cycle(hour)", "cycle(hour, period=24)"),
        ("cycle(day, df=3, period = 7.0)", "cycle(day, period=7)"),
        ("body mass", "`body mass`"),
        ("{x/2}", "{x / 2}"),
        ("C(site)", "C(site, base='a')"),
        ("log( x )", "log(x)"),
    ],
)
def test_a_term_is_found_as_typed(typed, name):
    assert find(typed, NAMES) == name


@pytest.mark.parametrize(
    ("typed", "says"),
    [
        ("cycle(day)", "any of cycle(day, period=7), cycle(day, period=365)"),
        ("cycle(hour, period=12)", "Did you mean 'cycle(hour, period=24)'"),
        ("curve(tmp)", "no term 'curve(tmp)'. Did you mean 'curve(temp)'"),
        ("C(site, base='b')", "Did you mean"),
        ("curve(hour)", "no term"),
        ("y ~ x", "no term"),
        ("((", "There are: 'Intercept'"),
    ],
)
def test_a_term_is_not_guessed(typed, says):
    with pytest.raises(FormulaError) as caught:
        find(typed, NAMES)
    assert says in str(caught.value)


def test_products_are_found_in_either_order():
    assert find("x:curve( z )", ["x", "curve(z):x"]) == "curve(z):x"
