"""Random syntax trees of the netlist language, as hypothesis strategies. Spans are empty: compare trees through their layout."""

from __future__ import annotations

from typing import Any

from hypothesis import strategies as st

from polewise.grammar import syntax as s
from polewise.grammar.source import no_span
from polewise.grammar.units import parse_unit

SPAN = no_span()
# Plain names, and words of the language that are names wherever the word itself can't stand.
WORDS = (
    "bus",
    "out",
    "x",
    "cell",
    "drive",
    "a_1",
    "Load",
    "above",
    "low",
    "hold",
    "run",
    "keep",
    "set",
    "normal",
    "by",
    "step",
    "smooth",
    "cold",
    "d",
)
UNITS = ("V", "mohm", "uH", "mF", "A", "kW", "ms", "%", "/V", "/V/s", "V/us", "kg*m^2", "A*s/rad", "Hz", "K/W", "m^2", "s")

words = st.sampled_from(WORDS)
plain_names = words.map(lambda word: s.NamePart(SPAN, (word,)))
units = st.sampled_from(UNITS).map(parse_unit)
documents = st.none() | st.text(alphabet="abc äΩ0#{}[]()--;", max_size=12)


def _number(digits: str, unit: Any) -> s.Number:
    return s.Number(SPAN, float(digits), unit, digits)


numbers = st.builds(_number, st.sampled_from(("0", "1", "12", "0.5", "3.25", "1e-6", "2.5E+3", "007")), st.none() | units)
counts = st.builds(_number, st.sampled_from(("0", "1", "12")), st.none())


def _index_expressions() -> st.SearchStrategy[Any]:
    variable = st.sampled_from(("n", "m")).map(lambda word: s.Reference(SPAN, (s.NamePart(SPAN, (word,)),)))
    return variable | counts | st.builds(s.Binary, st.just(SPAN), st.sampled_from("+-*"), variable, counts)


@st.composite
def names(draw: st.DrawFn, *, star: bool = False) -> s.NamePart:
    """`cell{n}_{m+1}x`."""
    pieces: list[Any] = [draw(words)]
    for _ in range(draw(st.integers(0, 2))):
        pieces.append(s.Star(SPAN) if star and draw(st.booleans()) else draw(_index_expressions()))
        rest = draw(st.sampled_from(("", "_", "2b")))
        if rest:
            pieces.append(rest)
    return s.NamePart(SPAN, tuple(pieces))


def references(*, star: bool = False) -> st.SearchStrategy[s.Reference]:
    """`bus.v`, `berth{n}.choke.i`."""
    return st.lists(names(star=star), min_size=1, max_size=3).map(lambda parts: s.Reference(SPAN, tuple(parts)))


booleans = st.booleans().map(lambda value: s.Boolean(SPAN, value))
leaves = numbers | references() | booleans


def _grow(inner: st.SearchStrategy[Any]) -> st.SearchStrategy[Any]:
    span = st.just(SPAN)
    settings = st.lists(st.builds(s.Setting, span, words, span, inner), max_size=2, unique_by=lambda setting: setting.name).map(tuple)
    return (
        st.builds(s.Unary, span, st.sampled_from(("-", "+", "not")), inner)
        | st.builds(s.Binary, span, st.sampled_from(("+", "-", "*", "/", "^", "<", "<=", ">", ">=", "==", "!=", "and", "or")), inner, inner)
        | st.builds(s.Conditional, span, inner, inner, inner)
        | st.builds(s.Call, span, words, span, st.lists(inner, max_size=3).map(tuple), settings)
        | st.builds(s.ListOf, span, st.lists(inner, min_size=2, max_size=3).map(tuple))
        | st.builds(s.Derivative, span, inner)
        | st.builds(s.Filtered, span, inner, inner, st.none() | inner)
        | st.builds(s.Sampled, span, inner, inner)
        | st.builds(s.Delayed, span, inner, inner)
        | st.builds(s.Averaged, span, inner, inner)
    )


expressions = st.recursive(leaves, _grow, max_leaves=8)
maybe = st.none() | expressions
span = st.just(SPAN)


# ---------------------------------------------------------------- paths and boxes

contents = (
    st.builds(s.ValueBox, expressions)
    | st.builds(s.PowerBox, expressions, st.sampled_from(("above", "below")), expressions)
    | st.builds(s.EquationBox, expressions, expressions)
)
boxes = st.builds(s.Box, span, st.none() | names(), contents, maybe)
parallel_boxes = st.builds(s.ParallelBoxes, span, st.lists(boxes, min_size=2, max_size=3).map(tuple))


@st.composite
def paths(draw: st.DrawFn) -> s.Path:
    """From node to node."""
    middle = draw(st.lists(references() | boxes | parallel_boxes, max_size=3))
    return s.Path(SPAN, draw(st.none() | names()), (draw(references()), *middle, draw(references())))


@st.composite
def placements(draw: st.DrawFn) -> s.Placement:
    """`leg: pole(a, b, c, duty = d)`."""
    settings = draw(st.lists(st.builds(s.Setting, span, words, span, expressions), max_size=3, unique_by=lambda setting: setting.name))
    arguments = draw(st.lists(expressions, max_size=3))
    return s.Placement(SPAN, draw(names()), draw(words), SPAN, tuple(arguments), tuple(settings), draw(documents))


# ---------------------------------------------------------------- declarations

tolerances = st.builds(s.Tolerance, span, expressions, st.booleans())
givens = st.builds(s.Given, span, references(), expressions, st.none(), st.none() | tolerances, documents) | st.builds(
    s.Given, span, references(), st.none(), units, st.none(), documents
)


@st.composite
def tables(draw: st.DrawFn) -> s.Table:
    """Of points or from a file."""
    points = tuple(draw(st.lists(st.tuples(expressions, expressions), max_size=3)))
    file = None if points else draw(st.text(alphabet="ab/._", max_size=8))
    columns = draw(st.none() | st.tuples(words, words)) if file is not None else None
    unit, argument_unit = draw(st.none() | units), draw(st.none() | units)
    outside = draw(st.sampled_from((None, "hold", "extend", "repeat")))
    name, argument = draw(words), draw(words)
    smooth, odd = draw(st.booleans()), draw(st.booleans())
    file_span = None if file is None else SPAN
    return s.Table(SPAN, name, SPAN, argument, argument_unit, unit, points, file, file_span, columns, smooth, odd, outside)


distinct_words = st.lists(words, min_size=1, max_size=3, unique=True).map(tuple)
declarations = (
    givens
    | st.builds(s.Title, span, st.text(alphabet="ab c#", max_size=10))
    | st.builds(s.Use, span, st.text(alphabet="ab/._", max_size=10), span)
    | st.builds(lambda name, kind: s.ReferenceNode(SPAN, name, kind, None if kind is None else SPAN), names(), st.none() | units)
    | st.builds(s.Input, span, names(), maybe, documents)
    | st.builds(s.Signal, span, names(), expressions)
    | st.builds(s.StateRate, span, names(), expressions, maybe, st.none() | st.tuples(expressions, expressions), st.booleans())
    | st.builds(s.Latch, span, names(), expressions)
    | st.builds(s.Solve, span, names(), expressions, expressions, maybe)
    | st.builds(s.Function, span, words, span, distinct_words, expressions)
    | tables()
    | st.builds(s.Wires, span, names(), distinct_words)
)


# ---------------------------------------------------------------- events and studies

actions = st.builds(s.SetAction, span, references(), expressions) | st.builds(s.SwitchAction, span, references(), st.booleans())
some_actions = st.lists(actions, max_size=3).map(tuple)


@st.composite
def whenevers(draw: st.DrawFn) -> s.Whenever:
    """With an edge or a condition."""
    edge = draw(st.sampled_from((None, "rises above", "falls below")))
    threshold = None if edge is None else draw(expressions)
    return s.Whenever(SPAN, draw(expressions), edge, threshold, draw(maybe), draw(some_actions))


events = st.builds(s.At, span, expressions, some_actions) | st.builds(s.Every, span, expressions, some_actions) | whenevers()


@st.composite
def sequences(draw: st.DrawFn) -> s.Sequence:
    """Steps of distinct names."""
    steps: list[s.Step] = []
    for name in draw(distinct_words):
        until, after = draw(maybe), draw(maybe)
        goes_on = (until is not None or after is not None) and draw(st.booleans())
        else_name, else_span, else_after = (draw(words), SPAN, draw(expressions)) if goes_on else (None, None, None)
        steps.append(s.Step(SPAN, name, draw(some_actions), until, after, else_name, else_span, else_after))
    return s.Sequence(SPAN, draw(names()), tuple(steps))


@st.composite
def requirements(draw: st.DrawFn) -> s.Require:
    """With or without a bound and a window."""
    relation = draw(st.sampled_from((None, "within", "above", "below")))
    low = draw(expressions) if relation in ("within", "above") else None
    high = draw(expressions) if relation in ("within", "below") else None
    start = draw(maybe)
    end = draw(maybe) if start is not None else None
    return s.Require(SPAN, draw(st.none() | words), draw(expressions), relation, low, high, start, end, draw(documents))


@st.composite
def studies(draw: st.DrawFn) -> s.Study:
    """At most one of the orders that may stand once."""
    starts = (
        st.none()
        | st.builds(s.Start, span, st.sampled_from(("settled", "cold")), st.none(), st.none())
        | st.builds(s.Start, span, st.just("from"), words, expressions)
    )
    once = [draw(starts), draw(st.none() | st.builds(s.RunFor, span, expressions)), draw(st.none() | st.builds(s.StudyTolerance, span, expressions))]
    once.append(draw(st.none() | st.builds(s.Sampling, span, st.sampled_from(("exact", "mean")))))
    keeps = st.builds(s.Keep, span, st.lists(references(star=True), min_size=1, max_size=3).map(tuple))
    many = draw(st.lists(events | requirements() | keeps | givens, max_size=3))
    return s.Study(SPAN, draw(words), SPAN, draw(documents), tuple([order for order in once if order is not None] + many))


# ---------------------------------------------------------------- whole files

simple_statements = declarations | paths() | placements() | events | sequences()
local_statements = simple_statements.filter(lambda statement: not isinstance(statement, s.Title | s.Use))
inner_statements = local_statements | st.builds(
    s.Each, span, words, expressions, expressions, st.lists(local_statements, max_size=2).map(tuple)
)  # fmt: skip
assemblies = st.builds(
    s.Assembly, span, words, span, distinct_words.map(lambda ports: tuple(s.NamePart(SPAN, (port,)) for port in ports)), documents,
    st.lists(inner_statements, max_size=3).map(tuple),
)  # fmt: skip
statements = simple_statements | studies() | assemblies
netlists = st.lists(statements, max_size=4).map(lambda found: s.Netlist(SPAN.source, tuple(found)))
