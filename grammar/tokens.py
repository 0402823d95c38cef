"""Text to tokens: words, numbers with their units, strings, marks, and where a statement ends."""

from __future__ import annotations

import re
from dataclasses import dataclass
from math import inf

from polewise.grammar import messages
from polewise.grammar.diagnostics import Diagnostic
from polewise.grammar.source import SourceText, Span
from polewise.grammar.units import NO_UNIT, UNIT_SHAPE, Unit, nearest_unit, parse_unit, unit_run
from polewise.grammar.words import EXPRESSION_WORDS, OPENERS, SOFT_WORDS, STATEMENT_WORDS, nearest_word

MAX_TOKENS = 300_000  # about 28,000 lines; a file of the permitted size with more than that is no netlist
MAX_STATEMENT_TOKENS = 20_000  # up to its end or its block; a table of 3,000 points has that many, larger ones belong in a CSV file
MAX_DEPTH = 100  # open brackets and braces at one place
MAX_LEXICAL_ERRORS = 50


class Token:
    """One token: its terminal in netlist.lark, its text and its place. A number has its value and unit, a UNIT its unit, a STRING its content."""

    __slots__ = ("end", "number", "start", "text", "type", "unit")

    def __init__(self, type: str, text: str, start: int, end: int, number: float = 0.0, unit: Unit | None = None) -> None:
        self.type = type
        self.text = text
        self.start = start
        self.end = end
        self.number = number
        self.unit = unit

    def __repr__(self) -> str:
        return f"{self.type}({self.text!r})"


@dataclass(frozen=True, slots=True)
class Tokens:
    """All tokens of a text, the last one `$END`.

    Args:
        tokens: in order.
        diagnostics: what was wrong in single characters, words and numbers; the tokens go on after each.
        longest_line: the greatest number of tokens between two ends of statements, an upper bound for the depth of an expression.
        complete: False where a limit was reached and the rest was left out.
    """

    tokens: list[Token]
    diagnostics: list[Diagnostic]
    longest_line: int
    complete: bool


_MARKS = {
    "--": "WIRE", "..": "RANGE", "+-": "TOLERANCE_MARK", "<=": "COMPARE", ">=": "COMPARE", "==": "COMPARE", "!=": "COMPARE",
    "<": "COMPARE", ">": "COMPARE", "+": "SIGN", "-": "SIGN", "*": "TIMES", "/": "TIMES", "^": "POWER", "(": "LPAR", ")": "RPAR",
    "[": "LSQB", "]": "RSQB", "|": "VBAR", ":": "COLON", ";": "SEMICOLON", ",": "COMMA", ".": "DOT", "=": "EQUAL",
}  # fmt: skip

# The order of the alternatives is that of frequency; lastindex tells which one matched.
_SCAN = re.compile(
    r"([ \t\r\f\v\u00a0\ufeff]+|\#[^\n]*)"  # 1 blank or comment
    r"|([A-Za-z_][A-Za-z0-9_]*)"  # 2 word
    r"|([0-9]+(?:\.[0-9]+)?(?:[eE][+-]?[0-9]+)?)"  # 3 number
    r"|(--|\.\.|\+-|<=|>=|==|!=|[-+*/^()\[\]|:;,.=<>])"  # 4 mark
    r"|(\n(?:[ \t\r\n\f\v]+|\#[^\n]*)*)"  # 5 newline, with blank and comment lines behind it
    r"|([{}])"  # 6 brace
    r'|("[^"\n]*"?)'  # 7 string
).match
_UNKNOWN = re.compile(r"[^\s\w()\[\]{}:;,.=<>+\-*/^|\"#]+|[^\W0-9]+").match
_QUOTED = re.compile(r"[“”„«'‘’]([^\"“”„»'‘’\n]*)[\"“”»'‘’]").match
# Characters that come from a word processor or another notation, with what was meant.
LIKELY_MARKS = {
    "−": "-", "–": "--", "—": "--", "×": "*", "·": "*", "÷": "/", "≤": "<=", "≥": ">=", "≠": "!=", "±": "+-", "“": '"', "”": '"', "„": '"', "'": '"',
    "&": "and", "!": "not", "\\": "/",
}  # fmt: skip
_REST = re.compile(r"[A-Za-z0-9_]+").match
_RATE_OF = re.compile(r"/dt(?![A-Za-z0-9_])").match
_WORD = re.compile(r"[A-Za-z_\u00b5\u03bc\u03a9\u2126%°][A-Za-z0-9_\u00b5\u03bc\u03a9\u2126%°]*").match
_UNIT_ALONE = re.compile(r"[ \t]*((?:1(?=/))?/?[A-Za-z\u00b5\u03bc\u03a9\u2126%°][\w%°^*/-]*|1(?!\w))").match
_LINE_ENDS = re.compile(r"[ \t\r]*(?:\#[^\n]*)?(?:\n|\Z)").match
_DECIMALS = re.compile(r"[0-9]+(?:[eE][+-]?[0-9]+)?").match

# A newline after one of these goes on with the statement.
_GOES_ON = frozenset(
    {"WIRE", "SIGN", "TIMES", "POWER", "COMPARE", "TOLERANCE_MARK", "COMMA", "EQUAL", "RANGE", "VBAR", "AND", "OR", "NOT", "IF", "OTHERWISE"}
)
# What opens a line of its own and so shows that a bracket or a path before it was left open.
_NEW_STATEMENT = re.compile(
    r"(?:\}|d/dt\b(?=\s+[A-Za-z_][\w{}+-]*\s*=[^=])|(?:" + "|".join(sorted(OPENERS - {"at"})) + r")\b(?!\s*[.(=,)\]])"
    r"|[A-Za-z_]\w*(?:\{[^}\n]*\}\w*)*\s*:)"
).match
_NEW_PATH = re.compile(r"[A-Za-z_][\w.]*(?:\{[^}\n]*\}[\w.]*)*\s*--").match


def tokenise(source: SourceText) -> Tokens:
    """Split a text into tokens. Never fails: what can't be read is reported and passed over."""
    return _Tokeniser(source).run()


class _Tokeniser:
    """One pass over one text."""

    __slots__ = ("brackets", "diagnostics", "line_start", "longest_line", "opener", "source", "text", "tokens")

    def __init__(self, source: SourceText) -> None:
        self.source = source
        self.text = source.text
        self.tokens: list[Token] = []
        self.diagnostics: list[Diagnostic] = []
        self.brackets: list[str] = []  # types of the opening tokens
        self.opener = ""  # type of the first token of the statement
        self.line_start = 0  # index of its first token
        self.longest_line = 0

    def run(self) -> Tokens:
        text, tokens, length = self.text, self.tokens, len(self.text)
        append, brackets, marks = tokens.append, self.brackets, _MARKS
        at, last = 0, "_NEWLINE"
        while at < length:
            match = _SCAN(text, at)
            if match is None:
                at = self._unknown(at)
                if len(self.diagnostics) > MAX_LEXICAL_ERRORS:
                    return self._stopped(messages.too_many_errors(self._span(at - 1, at)))
                continue
            kind, end = match.lastindex, match.end()
            if kind == 1:
                at = end
                continue
            if kind == 2:
                end = self._word(match[2], at, end)
            elif kind == 3:
                end = self._number(match[3], at, end)
            elif kind == 4:
                mark = match[4]
                if mark == "." and _DECIMALS(text, end) and last != "NAME" and last != "NAME_REST" and last != "_INDEX_CLOSE":
                    end = self._bare_decimal(at, end)
                else:
                    type = marks[mark]
                    if type == "LPAR" or type == "LSQB":
                        brackets.append(type)
                    elif (type == "RPAR" and brackets and brackets[-1] == "LPAR") or (type == "RSQB" and brackets and brackets[-1] == "LSQB"):
                        brackets.pop()
                    elif mark == "*" and last == "_INDEX_OPEN":
                        type = "STAR"
                    append(Token(type, mark, at, end))
                    if type == "LPAR" and self.opener == "REFERENCE":
                        end = self._unit_alone(end)
            elif kind == 5:
                self._newline(at, end)
            elif kind == 6:
                end = self._brace(match[6], at, end)
            else:
                string = match[7]
                if len(string) < 2 or string[-1] != '"':
                    self._report(messages.unterminated_string(self._span(at, end)))
                    append(Token("STRING", string[1:], at, end))
                else:
                    append(Token("STRING", string[1:-1], at, end))
            if tokens:
                last = tokens[-1].type
                if len(brackets) > MAX_DEPTH:
                    return self._stopped(messages.too_deep(self._span(at, end), MAX_DEPTH))
                if len(tokens) > MAX_TOKENS:
                    return self._stopped(messages.too_many_tokens(self._span(at, end), MAX_TOKENS))
                if len(tokens) - self.line_start > MAX_STATEMENT_TOKENS:
                    return self._stopped(messages.statement_too_long(self._span(tokens[self.line_start].start, at), MAX_STATEMENT_TOKENS))
                if len(self.diagnostics) > MAX_LEXICAL_ERRORS:
                    return self._stopped(messages.too_many_errors(self._span(at, end)))
            at = end
        self._end_statement(length, length)
        append(Token("$END", "", length, length))
        return Tokens(tokens, self.diagnostics, self.longest_line, True)

    # ------------------------------------------------------------ small helps

    def _span(self, start: int, end: int) -> Span:
        return Span(self.source, start, end)

    def _report(self, diagnostic: Diagnostic) -> None:
        self.diagnostics.append(diagnostic)

    def _stopped(self, diagnostic: Diagnostic) -> Tokens:
        self._report(diagnostic)
        at = len(self.text)
        return Tokens([Token("$END", "", at, at)], self.diagnostics, 0, False)

    def _unknown(self, at: int) -> int:
        """A character the language has no use for: report it and take it for what was most likely meant."""
        character = self.text[at]
        quoted = _QUOTED(self.text, at)
        if quoted is not None:
            self._report(messages.wrong_quotes(self._span(at, quoted.end()), quoted[1]))
            self.tokens.append(Token("STRING", quoted[1], at, quoted.end()))
            return quoted.end()
        match = _UNKNOWN(self.text, at)
        end = at + 1 if match is None or character in LIKELY_MARKS else match.end()
        while character == "&" and self.text[end : end + 1] == "&":
            end += 1
        found = self.text[at:end]
        meant = LIKELY_MARKS.get(character)
        touching = self.tokens[-1] if self.tokens and self.tokens[-1].end == at and self.tokens[-1].type == "NAME" else None
        self._report(messages.unknown_character(self._span(at, end), found, meant, in_name=found.isalpha() or touching is not None))
        if meant is not None and meant in _MARKS:
            self.tokens.append(Token(_MARKS[meant], meant, at, end))
        return end

    # ------------------------------------------------------------ words and braces

    def _word(self, word: str, at: int, end: int) -> int:
        tokens = self.tokens
        following = self.text[end : end + 1]
        type = "NAME"
        previous = tokens[-1].type if tokens else "_NEWLINE"
        if previous != "DOT":
            if word in SOFT_WORDS:
                # A word that touches a brace is a name with an index, and one before a colon names something.
                if following != "{" and following != "." and not (word in STATEMENT_WORDS and self._colon_follows(end)):
                    type = SOFT_WORDS[word]
            elif word in EXPRESSION_WORDS:
                type = EXPRESSION_WORDS[word]
            elif word in OPENERS:
                type = word.upper()
            elif word == "d" and following == "/" and _RATE_OF(self.text, end):
                end += 3
                tokens.append(Token("RATE_OF", "d/dt", at, end))
                return end
        if len(tokens) == self.line_start:
            self.opener = type
        tokens.append(Token(type, word, at, end))
        if type == "IN" and self.opener in ("GIVEN", "TABLE") and all(token.type != "EQUAL" for token in tokens[self.line_start :]):
            return self._unit_alone(end)
        return end

    def _colon_follows(self, end: int) -> bool:
        return self.text[end : end + 8].lstrip(" \t")[:1] == ":"

    def _brace(self, brace: str, at: int, end: int) -> int:
        tokens, brackets = self.tokens, self.brackets
        if brace == "{":
            touching = tokens[-1] if tokens and tokens[-1].end == at else None
            is_name = touching is not None and touching.type in ("NAME", "NAME_REST", "_INDEX_CLOSE")
            if is_name and not _LINE_ENDS(self.text, end):  # an index is never broken over lines, so such a brace opens a block
                brackets.append("_INDEX_OPEN")
                tokens.append(Token("_INDEX_OPEN", brace, at, end))
            else:
                brackets.append("LBRACE")
                tokens.append(Token("LBRACE", brace, at, end))
                self._statement_starts()
            return end
        if brackets and brackets[-1] == "_INDEX_OPEN":
            brackets.pop()
            tokens.append(Token("_INDEX_CLOSE", brace, at, end))
            rest = _REST(self.text, end)
            if rest is not None:
                tokens.append(Token("NAME_REST", rest[0], end, rest.end()))
                end = rest.end()
            return end
        while brackets and brackets[-1] != "LBRACE":
            brackets.pop()
        if brackets:
            brackets.pop()
        self._end_statement(at, at)
        tokens.append(Token("RBRACE", brace, at, end))
        return end

    # ------------------------------------------------------------ where statements end

    def _newline(self, at: int, end: int) -> None:
        last = self.tokens[-1].type if self.tokens else "_NEWLINE"
        brackets = self.brackets
        if brackets and brackets[-1] != "LBRACE":
            colon_may_follow = last == "LSQB" or last == "VBAR"
            if colon_may_follow or not (_NEW_STATEMENT(self.text, end) or _NEW_PATH(self.text, end)):
                return
            while brackets and brackets[-1] != "LBRACE":
                brackets.pop()
        elif last in _GOES_ON and not _NEW_STATEMENT(self.text, end):
            return
        self._end_statement(at, at + 1)

    def _end_statement(self, at: int, end: int) -> None:
        tokens = self.tokens
        if tokens and tokens[-1].type not in ("_NEWLINE", "LBRACE"):
            tokens.append(Token("_NEWLINE", "\n", at, end))
            self._statement_starts()

    def _statement_starts(self) -> None:
        count = len(self.tokens)
        self.longest_line = max(self.longest_line, count - self.line_start)
        self.line_start = count
        self.opener = ""

    # ------------------------------------------------------------ numbers and units

    def _number(self, digits: str, at: int, end: int) -> int:
        text = self.text
        following = text[end : end + 1]
        if following == "." and text[end + 1 : end + 2] != ".":
            end += 1
            self._report(messages.bare_decimal(self._span(at, end), digits + ".0"))
            following = text[end : end + 1]
        blank = following == " "
        start = end + 1 if blank else end
        unit: Unit | None = None
        shape = UNIT_SHAPE.match(text, start)
        run = NO_UNIT if shape is None else unit_run(shape[0])
        if run.unit is not None:
            unit = run.unit
            end = start + run.length
            if run.star_after_slash:
                self._report(messages.star_after_slash(self._span(start, end), unit.symbol))
            if run.joined_degrees:
                self._report(messages.degrees_joined(self._span(start, end), unit.symbol))
        else:
            end = self._unknown_unit(at, end, start)
        number = float(digits)
        if number == inf:
            self._report(messages.number_too_large(self._span(at, at + len(digits))))
            number = 0.0
        self.tokens.append(Token("NUMBER", digits, at, end, number, unit))
        return end

    def _unknown_unit(self, at: int, end: int, start: int) -> int:
        """A word behind a number that is no unit: report and pass over it, unless the parser can say better what is wrong."""
        word = _WORD(self.text, start)
        if word is None:
            return end
        name = word[0]
        if name in SOFT_WORDS or name in EXPRESSION_WORDS or name in OPENERS:
            return end
        blank = start > end
        following = self.text[word.end() : word.end() + 8].lstrip(" \t")[:1]
        if blank and (following in ("(", ":", ".", "{") or (nearest_unit(name) is None and nearest_word(name) is not None)):
            return end
        previous = self.tokens[-1] if self.tokens else None
        if not blank and previous is not None and ((previous.type in ("WIRE", "COLON") and not self.brackets) or previous.text in OPENERS):
            self._report(messages.name_starts_with_digit(self._span(at, word.end())))
            return word.end()
        self._report(messages.unknown_unit(self._span(start, word.end()), name, nearest_unit(name), self._span(at, end)))
        return word.end()

    def _bare_decimal(self, at: int, end: int) -> int:
        decimals = _DECIMALS(self.text, end)
        assert decimals is not None
        digits = "0." + decimals[0]
        self._report(messages.bare_decimal(self._span(at, decimals.end()), digits))
        return self._number(digits, at, decimals.end())

    def _unit_alone(self, end: int) -> int:
        """The unit after `in` of a given or a table; reads nothing where no word follows."""
        match = _UNIT_ALONE(self.text, end)
        if match is None:
            return end
        return self._unit_token(match[1], match.start(1), match.end(1))

    def _unit_token(self, symbol: str, start: int, end: int) -> int:
        unit = parse_unit(symbol)
        if unit is None:
            run = unit_run(symbol)
            span = self._span(start, end)
            if run.length == len(symbol) and run.star_after_slash:
                self._report(messages.star_after_slash(span, symbol))
            elif run.length == len(symbol):
                self._report(messages.degrees_joined(span, symbol))
            else:
                self._report(messages.unknown_unit(span, symbol, nearest_unit(symbol), None))
        self.tokens.append(Token("UNIT", symbol, start, end, 0.0, unit))
        return end
