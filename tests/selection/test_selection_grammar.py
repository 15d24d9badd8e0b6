import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from meseta.errors import RecipeError
from meseta.selection import QUANTITIES, Rule, parse_rule, rule_sentence, rule_text
from meseta.selection.conditions import (
    Contains,
    Every,
    Exclude,
    Literal,
    Measure,
    Numbers,
    OneOf,
    Some,
    Span,
    Truth,
    Within,
    Word,
)


def test_precedence_not_before_and_before_or():
    rule = parse_rule("not a and b or c")
    a, b, c = (Truth(Measure(name)) for name in "abc")
    assert rule.condition == Some((Every((Exclude(a), b)), c))


def test_brackets_change_the_grouping():
    rule = parse_rule("not (a and (b or c))")
    a, b, c = (Truth(Measure(name)) for name in "abc")
    assert rule.condition == Exclude(Every((a, Some((b, c)))))


def test_all_forms_of_a_condition():
    assert parse_rule("0.1 < x <= 2").condition == Numbers((Literal(0.1), Measure("x"), Literal(2.0)), ("<", "<="))
    assert parse_rule("x in -1..2e3").condition == Within(Measure("x"), Span(Literal(-1.0), Literal(2000.0)))
    assert parse_rule("x in ..2").condition == Within(Measure("x"), Span(None, Literal(2.0)))
    assert parse_rule("x in 2..").condition == Within(Measure("x"), Span(Literal(2.0), None))
    assert parse_rule("x not in ['a', 'b']").condition == Exclude(OneOf(Measure("x"), (Literal("a"), Literal("b"))))
    assert parse_rule('x contains "it""s"').condition == Contains(Measure("x"), Literal('it"s'))
    assert parse_rule("p(1e-5..1e-3, molecule)").condition == Truth(
        Measure("p", (Span(Literal(1e-5), Literal(1e-3)), Word("molecule")))
    )


def test_label_and_switch():
    rule = parse_rule('off "clean break": rupture_found')
    assert rule == Rule(Truth(Measure("rupture_found")), "clean break", False)


@pytest.mark.parametrize(
    ("text", "column", "words"),
    [
        ("highest_g0 >", 13, "ends too early"),
        ("highest_g0 = 3", 12, "=="),
        ("a and and b", 7, "'and' does not fit"),
        ("(a or b", 8, "ends too early"),
        ("a)", 2, "')' does not fit"),
        ("x in 3..1", 6, "empty"),
        ("x in [1, 2", 11, "ends too early"),
        ("a && b", 3, "write 'and'"),
        ("'half", 1, "no closing quote"),
        ("3 < 4 and", 10, "ends too early"),
        ("'text'", 7, "ends too early"),
        ("x in ..", 8, "ends too early"),
        ("x > 1e999", 5, "too large"),
        ("__import__('os').system('x')", 17, "'.' has no meaning"),
        ("", 1, "ends too early"),
    ],
)
def test_errors_point_at_the_word(text, column, words):
    with pytest.raises(RecipeError) as caught:
        parse_rule(text)
    assert f"column {column}:" in str(caught.value)
    assert words in str(caught.value)
    assert "\n" not in str(caught.value)


def test_nesting_is_bounded():
    with pytest.raises(RecipeError, match="nested too deeply"):
        parse_rule("(" * 100_0 + "a" + ")" * 100_0)
    with pytest.raises(RecipeError, match="longer than"):
        parse_rule("a and " * 10_000 + "a")


@settings(deadline=None, max_examples=400)
@given(st.text(max_size=60))
@example("١ < a")
@example("a\x00b")
@example("µ > 1")
def test_any_text_is_a_rule_or_a_recipe_error(text):
    try:
        rule = parse_rule(text)
    except RecipeError as error:
        assert "column" in str(error)
    else:
        assert parse_rule(rule_text(rule)) == rule


_MARKS = ["and", "or", "not", "off", "in", "contains", "(", ")", "[", "]", "..", "<", ">=", "==", ",", "1e-5", ":"]
_WORDS = [*sorted(QUANTITIES), *_MARKS, "3", "molecule", "'a'"]


@settings(deadline=None, max_examples=400)
@given(st.lists(st.sampled_from(_WORDS), max_size=14))
def test_any_row_of_words_is_a_rule_or_a_recipe_error(words):
    text = " ".join(words)
    try:
        rule = parse_rule(text)
    except RecipeError as error:
        assert "column" in str(error)
    else:
        assert parse_rule(rule_text(rule)) == rule
        assert rule_sentence(rule).endswith(".")


_names = st.sampled_from(["highest_g0", "plateaus", "molecule", "bias_volt"])
_numbers = st.floats(-1e9, 1e9, allow_nan=False).map(lambda value: Literal(value))
_texts = st.text(max_size=8).map(lambda value: Literal(value))
_measures = st.builds(Measure, _names)
_spans = st.tuples(_numbers, _numbers).filter(lambda ends: ends[0].value < ends[1].value).map(lambda ends: Span(*ends))
_leaves = st.one_of(
    st.builds(Truth, _measures),
    st.builds(lambda a, b: Numbers((a, b), ("<=",)), _measures, _numbers),
    st.builds(lambda a, b, c: Numbers((a, b, c), ("<", "<")), _numbers, _measures, _numbers),
    st.builds(Within, _measures, _spans),
    st.builds(lambda a, b: OneOf(a, tuple(b)), _measures, st.lists(_texts, min_size=1, max_size=3)),
    st.builds(Contains, _measures, _texts),
)


def _joined(kind):
    return lambda parts: st.lists(parts.filter(lambda part: not isinstance(part, kind)), min_size=2, max_size=3).map(
        lambda found: kind(tuple(found))
    )


_conditions = st.recursive(
    _leaves,
    lambda parts: st.one_of(st.builds(Exclude, parts), _joined(Every)(parts), _joined(Some)(parts)),
    max_leaves=8,
)


@settings(deadline=None, max_examples=300)
@given(_conditions, st.text(max_size=6), st.booleans())
def test_every_tree_is_printed_and_parsed_back(condition, label, active):
    rule = Rule(condition, label, active)
    assert parse_rule(rule_text(rule)) == rule


@pytest.mark.parametrize(
    "text",
    [
        "rupture_found and plateaus(1e-5..1e-3) >= 1 and not (highest_g0 < 0.8)",
        'off "clean": not reforms or 0.1 < last_plateau_nm <= 2',
        'specimen in ["a", "b"] and traces_since("new tip") < 100',
        "known(crossing_length)",
    ],
)
def test_canonical_text_is_printed_unchanged(text):
    assert rule_text(parse_rule(text)) == text


def test_sentences():
    rule = parse_rule("rupture_found and plateaus(1e-5..1e-3) >= 1 and not (highest_g0 < 0.8) and not reforms")
    assert rule_sentence(rule) == (
        "Keep a trace where a rupture was found, and the number of plateaus from 1e-5 to below 1e-3 G0 is at least 1, "
        "and the highest conductance before the rupture is not below 0.8 G0, and the contact stays open after the "
        "rupture."
    )
