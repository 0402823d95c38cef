"""Which declared name was probably meant: edit distance with neighbouring letters swapped counting once."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from typing import Final

# Comparing against very many names costs more than the hint is worth.
CANDIDATES_MAX: Final = 20_000
GROUPS_MAX: Final = 1_000
GROUP_SIZE_MAX: Final = 200


def distance(a: str, b: str, limit: int) -> int:
    """Edits (insert, drop, replace, swap neighbours) from a to b; limit + 1 where it is more.

    Source: Damerau 1964, Communications of the ACM 7(3); Wagner & Fischer 1974, Journal of the ACM 21(1), with the rows cut at the limit.
    """
    if abs(len(a) - len(b)) > limit:
        return limit + 1
    before: list[int] = []
    row = list(range(len(b) + 1))
    for i, x in enumerate(a, start=1):
        earlier, before, row = before, row, [i] + [0] * len(b)
        for j, y in enumerate(b, start=1):
            row[j] = min(before[j] + 1, row[j - 1] + 1, before[j - 1] + (x != y))
            if i > 1 and j > 1 and x == b[j - 2] and a[i - 2] == y:
                row[j] = min(row[j], earlier[j - 2] + 1)
        if min(row) > limit:
            return limit + 1
    return min(row[-1], limit + 1)


def nearest(name: str, candidates: Iterable[str]) -> str | None:
    """The candidate closest to a name, None where none is close (a third of its letters, at least one, at most three)."""
    limit = max(1, min(3, len(name) // 3))
    best: tuple[int, int, str] | None = None  # fewest edits, then the same length, then the alphabet
    folded = name.casefold()
    for count, candidate in enumerate(candidates):
        if count >= CANDIDATES_MAX:
            break
        if candidate == name:
            continue
        if candidate.casefold() == folded:
            return candidate
        if len(name) < 2 or len(candidate) < 2:
            continue
        d = distance(folded, candidate.casefold(), limit)
        rank = (d, abs(len(candidate) - len(name)), candidate)
        if d <= limit and (best is None or rank < best):
            best = rank
    return None if best is None else best[2]


def looks_mistyped(name: str, other: str) -> bool:
    """Whether a name used once is probably a slip for another: one edit apart, or apart in case alone; never merely numbered apart (b1, b2)."""
    if name == other or letters(name) == letters(other):
        return False
    if name.casefold() == other.casefold():
        return True
    return min(len(name), len(other)) >= 4 and distance(name, other, 1) == 1


def letters(name: str) -> str:
    """A name without its digits: what numbered names have in common."""
    return "".join(c for c in name if not c.isdigit())


def mistyped_among(once: Iterable[str], names: Iterable[str]) -> Iterator[tuple[str, str]]:
    """Pairs (name used once, name it looks like). Names that differ in digits alone are compared as one group, so many of them cost little."""
    groups: dict[str, list[str]] = {}
    for name in names:
        groups.setdefault(letters(name), []).append(name)
    if len(groups) > GROUPS_MAX:
        return
    close: dict[str, list[str]] = {}
    for name in once:
        own = letters(name)
        if own not in close:
            close[own] = [g for g in groups if g != own and (distance(own, g, 1) <= 1 or own.casefold() == g.casefold())]
        candidates = (other for group in close[own] for other in groups[group][:GROUP_SIZE_MAX])
        other = next((other for other in candidates if looks_mistyped(name, other)), None)
        if other is not None:
            yield name, other
