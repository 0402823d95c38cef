"""Where statements end, comments, strings, blanks."""

from __future__ import annotations

from .shown import check


def test_a_newline_ends_a_statement_but_not_inside_brackets() -> None:
    check("leg: pole(a,\n\n  # a comment\n  b\n)\nx -- y", "Placement(leg, pole, <a b>)", "Path(<x y>)")
    check("a --[r:\n 3 ohm\n]-- b", "Path(<a Box(r, 3 ohm) b>)")


def test_a_newline_after_a_wire_an_operator_or_a_comma_goes_on() -> None:
    check("a --[1 ohm]--\n   [2 ohm]--\n\n  b", "Path(<a Box(1 ohm) Box(2 ohm) b>)")
    check("signal x =\n a +\n b *\n c", "Signal(x, (a + (b * c)))")
    check("signal x = a and\n not\n b", "Signal(x, (a and (not b)))")
    check("study rest {\n keep a,\n b\n}", "Study(rest, <Keep(<a b>)>)")


def test_comments_blank_lines_and_returns_are_passed_over() -> None:
    check("# first\n\n  \t\na -- b # end\r\n# more\n\nc -- d", "Path(<a b>)", "Path(<c d>)")
    check("")
    check("# nothing else")
    check("\ufeffa\u00a0-- b", "Path(<a b>)")


def test_strings_hold_anything_but_quotes() -> None:
    check("title \"a # b -- [c] {d} äΩ; 'e'\"", "Title(a # b -- [c] {d} äΩ; 'e')")


def test_blocks_on_one_line_and_over_several() -> None:
    expected = "Each(n, 1, 2, <Path(<a b>)>)"
    check("each n in 1..2 { a -- b }", expected)
    check("each n in 1..2 {a -- b}", expected)
    check("each n in 1..2 {\n\n a -- b\n\n}\n", expected)
    check("each n in 1..2 { a -- b\n}", expected)


def test_a_brace_that_touches_a_name_is_an_index_unless_its_line_ends() -> None:
    check("study rest{\n}", "Study(rest)")
    check("a{1} -- b{n}{m}", "Path(<a{1} b{n}{m}>)")
