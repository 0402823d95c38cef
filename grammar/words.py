"""The words of the language: which open a statement, which are words only in their place, which can't be declared, and the nearest one."""

from __future__ import annotations

from difflib import get_close_matches

# Words that open a statement of a file or an assembly; never names.
OPENERS = frozenset(
    (
        "title", "use", "reference", "given", "input", "signal", "latch", "solve", "function", "table", "wires", "assembly", "each",
        "at", "every", "whenever", "sequence", "study",
    )
)  # fmt: skip
# Words of expressions; never names, because an expression can begin or go on with them.
EXPRESSION_WORDS = {"and": "AND", "or": "OR", "not": "NOT", "true": "TRUE", "false": "FALSE", "if": "IF", "otherwise": "OTHERWISE"}
# Words that open an order, a step or an action; a name wherever those can't stand.
ORDER_WORDS = ("start", "run", "keep", "tolerance", "sampling", "require", "modes", "loop", "response", "impedance", "magnify")
ACTION_WORDS = ("set", "open", "close")
# Orders that may come later; a study that asks for one is told so.
LATER_ORDERS = frozenset({"vary"})
STATEMENT_WORDS = frozenset((*ORDER_WORDS, *ACTION_WORDS, "step"))
# Words inside statements, with their terminals; a name wherever they can't stand.
SOFT_WORDS = {
    word: word.upper()
    for word in (
        *STATEMENT_WORDS, "in", "within", "held", "initially", "above", "below", "filtered", "by", "sampled", "delayed", "averaged", "over", "from",
        "columns", "rises", "falls", "for", "until", "else", "after", "during", "normal", "of", "to", "source", "load",
    )
}  # fmt: skip
# Words that stand where the grammar reads a name and the parser looks closer.
TABLE_WORDS = ("smooth", "odd", "hold", "extend", "repeat")
START_WORDS = ("settled", "cold", "from")
SAMPLING_WORDS = ("exact", "mean")

# Names with a meaning of their own: the box's readings, the time, pi, the variables of `filtered by`.
VALUE_NAMES = {
    "v": "a box's voltage",
    "i": "a box's current",
    "p": "a box's power",
    "time": "the time since the study's start",
    "pi": "the number 3.14159…",
    "s": "the variable of a filter",
    "z": "the variable of a sampled filter",
}

_ALL = tuple(sorted({*OPENERS, *EXPRESSION_WORDS, *SOFT_WORDS}))


def nearest_word(text: str, words: tuple[str, ...] | frozenset[str] | None = None) -> str | None:
    """The word of the language (or of the given ones) that a misspelt one was most likely meant to be, or None."""
    if len(text) > 40:
        return None
    close = get_close_matches(text.lower(), _ALL if words is None else sorted(words), n=1, cutoff=0.75)
    return close[0] if close else None
