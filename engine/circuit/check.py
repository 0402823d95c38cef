"""Checks over the whole circuit once all is lowered: values in a circle, overrides that met nothing, samplers' order, names that look mistyped."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator

from polewise.circuit import name_messages, value_messages
from polewise.circuit.declare import each_line
from polewise.circuit.expansion import Expansion
from polewise.circuit.near import mistyped_among, nearest
from polewise.circuit.things import NodeThing, PortThing
from polewise.expression.graph import SYMBOL, Node
from polewise.grammar.source import SourceText, Span


def check_values(x: Expansion) -> None:
    """Signals that need one another at the same time, without a state, delay or solve in between."""
    for scope, each in x.each_variables:
        known = scope.names.get(each.variable)
        if known is not None:
            x.report.add(name_messages.each_variable_declared(each_line(each), each.variable, known.word, known.span))
    if not x.unfinished:
        return  # reading signals on demand met every circle there is
    circle = _circle(x, list(x.signals), lambda name: _signals_in(x, x.signals[name].expression))
    if circle is not None:
        x.report.add(value_messages.algebraic_loop(x.signals[circle[0]].span, circle))


def _signals_in(x: Expansion, node: Node) -> Iterator[str]:
    for leaf in x.graph.symbols_under([node]):
        kind, name = x.graph.symbols[leaf]
        if kind == "signal" and name in x.signals:
            yield name


def _circle(x: Expansion, roots: Iterable[str], needs: Callable[[str], Iterable[str]]) -> list[str] | None:
    """The first circle met in a walk along `needs`, depth first."""
    done: set[str] = set()
    for root in roots:
        if root in done:
            continue
        path: dict[str, Iterator[str]] = {root: iter(list(needs(root)))}  # from the root to where the walk is
        while path:
            at, rest = next(reversed(path.items()))
            following = next(rest, None)
            if following is None:
                del path[at]
                done.add(at)
            elif following in path:
                names = list(path)
                return names[names.index(following) :]
            elif following not in done:
                path[following] = iter(list(needs(following)))
    return None


def order_samplers(x: Expansion) -> None:
    """Put samplers into the order in which they update at one instant: each after those whose new values it reads."""
    if not x.samplers:
        return
    owner = {symbol: name for name, sampler in x.samplers.items() for symbol, _ in sampler.updates}
    needs: dict[str, list[str]] = {}
    itself = []
    for name, sampler in x.samplers.items():
        nodes = [node for _, node in sampler.updates]
        needs[name] = sorted(_samplers_read(x, nodes, owner) - {name, x.reads_old.get(name, "")})
        if _reads_itself_through_signals(x, name, nodes, owner):
            itself.append(name)
    for name, memory in x.reads_old.items():
        needs[memory].append(name)
    circle = _circle(x, list(x.samplers), lambda name: needs[name]) or itself[:1]
    if circle:
        first = min(range(len(circle)), key=lambda k: x.samplers[circle[k]].span.start)
        circle = [*circle[first:], *circle[:first]]
        x.report.add(value_messages.samplers_in_circle(x.samplers[circle[0]].span, [x.samplers[name].span for name in circle[1:]]))
        return
    ordered: dict[str, None] = {}

    def visit(name: str) -> None:
        stack = [(name, iter(needs[name]))]
        while stack:
            at, rest = stack[-1]
            following = next((n for n in rest if n not in ordered), None)
            if following is None:
                ordered.setdefault(at)
                stack.pop()
            else:
                stack.append((following, iter(needs[following])))

    for name in x.samplers:
        if name not in ordered:
            visit(name)
    x.samplers = {name: x.samplers[name] for name in ordered}


def _samplers_read(x: Expansion, nodes: list[Node], owner: dict[str, str]) -> set[str]:
    """Samplers whose values are read directly or through signals."""
    found: set[str] = set()
    for node in _with_signals(x, nodes):
        if x.graph.operation[node] == SYMBOL:
            kind, name = x.graph.symbols[node]
            if kind == "sampled":
                found.add(owner[name])
    return found


def _reads_itself_through_signals(x: Expansion, name: str, nodes: list[Node], owner: dict[str, str]) -> bool:
    """Whether a block's new value needs itself: its own leaf met behind a signal. (Met directly, it is the block's own old value.)"""
    direct = set(x.graph.symbols_under(nodes))
    for leaf in direct:
        kind, signal = x.graph.symbols[leaf]
        if kind == "signal" and signal in x.signals and name in _samplers_read(x, [x.signals[signal].expression], owner):
            return True
    return False


def _with_signals(x: Expansion, nodes: list[Node]) -> list[Node]:
    """All nodes under some nodes, and under the signals they read."""
    known: set[Node] = set()
    fresh = x.graph.reachable(nodes, known)
    result = list(fresh)
    while fresh:
        further = [
            x.signals[name].expression
            for node in fresh
            if x.graph.operation[node] == SYMBOL
            for kind, name in (x.graph.symbols[node],)
            if kind == "signal" and name in x.signals
        ]
        fresh = x.graph.reachable([n for n in further if n not in known], known)
        result += fresh
    return result


def check_overrides(x: Expansion) -> None:
    """Values from outside that met no given."""
    known = list(x.givens)
    for given in x.path_givens.unused():
        x.report.add(value_messages.unknown_given(given.written.target.span, given.text, nearest(given.text, known), _word_at(x, given.text)))
    for path, text in x.overrides.items():
        if path not in x.used_overrides:
            span = Span(SourceText(f"given {path}", str(text)), 0, len(str(text)))
            x.report.add(value_messages.unknown_given(span, path, nearest(path, [*known, *x.inputs]), _word_at(x, path)))


def _word_at(x: Expansion, path: str) -> str | None:
    """What a path is if it is no given."""
    first, *rest = path.split(".")
    thing = x.top.names.get(first)
    for name in rest:
        thing = thing.member(name) if thing is not None else None
    return None if thing is None else thing.word


def near_names(x: Expansion) -> None:
    """Nodes touched once whose name is one slip away from another node's in their scope; of copies of an assembly, the first is looked at."""
    seen: set[str] = set()
    for scope in x.scopes:
        if scope.definition is not None:
            if scope.definition.name in seen:
                continue
            seen.add(scope.definition.name)
        nodes = {name: thing for name, thing in scope.names.items() if isinstance(thing, NodeThing)}
        once = [n for n, t in nodes.items() if not isinstance(t, PortThing) and x.nodes[t.key].count == 1 and x.nodes[t.key].domain is None]
        for name, other in mistyped_among(once, nodes):
            x.report.add(name_messages.near_name(nodes[name].span, name, other, nodes[other].span))
