"""What `settle` prints: potentials, currents, poles, assemblies and the power balance of the operating point."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from polewise.circuit.model import Circuit, Domain
from polewise.grammar.units import NONE, POWER, Dimension, format_value
from polewise.results.balance import PowerFlow
from polewise.results.settled import Settled
from polewise.results.traces import families
from polewise.terminal.style import Style
from polewise.terminal.tables import Heading, table, title_line

_FOLD_AT = 12  # members of a family beyond this stand in one row, lowest to highest
_ROWS_MAX = 400
_POWER_TOLD_W = 1e-9  # less is what rounding leaves
_ROUNDING = 1e-11  # likewise, as a share of the largest value beside it


@dataclass(frozen=True, slots=True)
class _Entry:
    """One readable value in a table."""

    name: str
    value: float
    domain: Domain

    @property
    def text(self) -> str:
        """Its value with its unit."""
        return _across_text(self.value, self.domain)


def _across_text(value: float, domain: Domain) -> str:
    return format_value(value, domain.across_dimension, prefer="rad/s" if domain is Domain.ROTATION else None)


def settled_lines(settled: Settled, style: Style, *, inner: bool) -> list[str]:
    """All lines.

    Args:
        inner: nodes and paths inside assemblies too.
    """
    circuit = settled.circuit
    plural = "" if settled.iterations == 1 else "s"
    lines = [title_line(f"{circuit.title or '(no title)'}: operating point", style)]
    lines.append(f"  found by {settled.strategy} in {settled.iterations} iteration{plural}")
    for finding in settled.findings:
        lines.append("  " + style.paint(f"{finding.subject}: {finding.kind.replace('_', ' ')}", "doubt"))
    lines += _nodes(settled, circuit, style, inner) + _paths(settled, circuit, style, inner)
    return lines + _poles(settled, style) + _assemblies(settled, circuit, style) + _power(settled, style)


def _nodes(settled: Settled, circuit: Circuit, style: Style, inner: bool) -> list[str]:
    lines: list[str] = []
    for domain in Domain:
        nodes = [n for n in circuit.nodes.values() if n.named and not n.is_reference and n.domain is domain and (inner or not n.owner)]
        names = [f"{n.name}.{domain.across}" for n in nodes]
        if not names:
            continue
        values = settled.values(names)
        entries = [_Entry(node.name, value, domain) for node, value in zip(nodes, values, strict=True)]
        word = {"v": "Potentials", "temp": "Temperatures", "speed": "Speeds"}[domain.across]
        lines += ["", title_line(word, style), *_columns(entries, style)]
    return lines


def _columns(entries: Sequence[_Entry], style: Style) -> list[str]:
    """Name and value pairs, several side by side where they fit."""
    pairs = _folded(entries)
    if len(pairs) > _ROWS_MAX:
        return [*_columns_of(pairs[:_ROWS_MAX], style), f"  and {len(pairs) - _ROWS_MAX} more"]
    return _columns_of(pairs, style)


def _columns_of(pairs: list[tuple[str, str]], style: Style) -> list[str]:
    width_name = max(len(name) for name, _ in pairs)
    width_value = max(len(value) for _, value in pairs)
    across = max(1, min(4, 96 // (width_name + width_value + 6)))
    rows = -(-len(pairs) // across)
    lines = []
    for row in range(rows):
        cells = pairs[row::rows]
        lines.append(("  " + "    ".join(f"{name:<{width_name}}  {value:>{width_value}}" for name, value in cells)).rstrip())
    return lines


def _folded(entries: Sequence[_Entry]) -> list[tuple[str, str]]:
    by_name = {entry.name: entry for entry in entries}
    pairs: list[tuple[str, str]] = []
    for name, members in families([entry.name for entry in entries]).items():
        group = [by_name[m] for m in members]
        if len(group) <= _FOLD_AT:
            pairs += [(entry.name, entry.text) for entry in group]
        else:
            low, high = min(group, key=lambda e: e.value), max(group, key=lambda e: e.value)
            pairs.append((f"{name} ({len(group)})", f"{low.text} … {high.text}"))
    return pairs


@dataclass(frozen=True, slots=True)
class _PathValues:
    """A path with what goes through it and across it."""

    name: str
    ends: str
    through: float
    across: float
    power_w: float
    domain: Domain

    def row(self) -> list[str]:
        """As a line of the table."""
        domain = self.domain
        power = "" if domain is Domain.HEAT else power_text(self.power_w)
        return [self.name, self.ends, format_value(self.through, domain.through_dimension), _across_text(self.across, domain), power]


def _paths(settled: Settled, circuit: Circuit, style: Style, inner: bool) -> list[str]:
    paths = [p for p in circuit.paths.values() if any(p.items) and (inner or not p.owner)]
    if not paths:
        return []
    domains = [circuit.nodes[p.left].domain for p in paths]
    asked: list[str] = []
    for path, domain in zip(paths, domains, strict=True):
        asked += [f"{path.name}.{domain.through}", f"{path.name}.{domain.across}"]
    got = settled.values(asked)
    largest = {domain: max(abs(got[2 * k]) for k, d in enumerate(domains) if d is domain) for domain in set(domains)}
    values = []
    for k, (path, domain) in enumerate(zip(paths, domains, strict=True)):
        through, across = got[2 * k], got[2 * k + 1]
        through = _rounded(through, largest[domain])
        values.append(_PathValues(path.name, f"{path.left} to {path.right}", through, across, across * through, domain))
    rows = _fold_paths(values)
    headings = (
        Heading("path", most=28),
        Heading("from, to", most=26),
        Heading("through", right=True, most=22),
        Heading("across", right=True, most=22),
        Heading("power", right=True, most=26),
    )
    more = [f"  and {len(rows) - _ROWS_MAX} more"] if len(rows) > _ROWS_MAX else []
    return ["", title_line("Paths", style), *table(headings, rows[:_ROWS_MAX], style), *more]


def power_text(power_w: float) -> str:
    """ "absorbs 12 kW", "delivers 3 kW"."""
    if abs(power_w) < _POWER_TOLD_W:
        return "0 W"
    return f"{'absorbs' if power_w > 0.0 else 'delivers'} {format_value(abs(power_w), POWER)}"


def _fold_paths(values: Sequence[_PathValues]) -> list[list[str]]:
    """Families of many like paths as one row, lowest to highest."""
    by_name = {value.name: value for value in values}
    rows: list[list[str]] = []
    for name, members in families([value.name for value in values]).items():
        group = [by_name[m] for m in members]
        if len(group) <= _FOLD_AT:
            rows += [value.row() for value in group]
            continue
        domain = group[0].domain
        through = _range_text([v.through for v in group], domain.through_dimension)
        across = _range_text([v.across for v in group], domain.across_dimension)
        rows.append([f"{name} ({len(group)})", "", through, across, f"{power_text(sum(v.power_w for v in group))} in all"])
    return rows


def _range_text(values: Sequence[float], dimension: Dimension) -> str:
    return f"{format_value(min(values), dimension)} … {format_value(max(values), dimension)}"


def _poles(settled: Settled, style: Style) -> list[str]:
    if not settled.poles:
        return []
    by_name = {pole.name: pole for pole in settled.poles}
    rows = []
    for name, members in families([pole.name for pole in settled.poles]).items():
        group = [by_name[m] for m in members]
        if len(group) <= _FOLD_AT:
            rows += [
                [
                    p.name,
                    p.mode,
                    format_value(p.duty, NONE),
                    format_value(p.current_a, Domain.ELECTRICAL.through_dimension),
                    format_value(p.loss_w, POWER),
                ]
                for p in group
            ]
            continue
        modes = ", ".join(f"{sum(p.mode == mode for p in group)} {mode}" for mode in dict.fromkeys(p.mode for p in group))
        duties = f"{min(p.duty for p in group):.3g} … {max(p.duty for p in group):.3g}"
        rows.append([f"{name} ({len(group)})", modes, duties, "", f"{format_value(sum(p.loss_w for p in group), POWER)} in all"])
    headings = (
        Heading("pole"),
        Heading("conduction"),
        Heading("duty", right=True),
        Heading("current out at mid", right=True),
        Heading("loss", right=True),
    )
    return ["", title_line("Poles", style), *table(headings, rows[:_ROWS_MAX], style)]


def _assemblies(settled: Settled, circuit: Circuit, style: Style) -> list[str]:
    if not circuit.assemblies:
        return []
    losses = settled.losses
    rows = []
    for name, members in families(list(circuit.assemblies)).items():
        if len(members) <= _FOLD_AT:
            rows += [[m, circuit.assemblies[m].kind, format_value(losses[m], POWER)] for m in members]
        else:
            total = sum(losses[m] for m in members)
            rows.append([f"{name} ({len(members)})", circuit.assemblies[members[0]].kind, f"{format_value(total, POWER)} in all"])
    headings = (Heading("assembly", most=44), Heading("kind"), Heading("power", right=True))
    return ["", title_line("Dissipated inside assemblies", style), *table(headings, rows[:_ROWS_MAX], style)]


def _power(settled: Settled, style: Style) -> list[str]:
    flows = settled.power_balance.flows
    rows = []
    for what, pick in _FLOW_ROWS:
        row = [what]
        for flow in flows.values():
            value = _rounded(pick(flow), flow.delivered_w)
            share = f"{100.0 * value / flow.delivered_w:.4g} %" if flow.delivered_w > 0.0 and what in _SHARED else ""
            row += [format_value(value, POWER), share]
        rows.append(row)
    headings = [Heading("")]
    for kind in flows:
        headings += [Heading(kind, right=True), Heading("", right=True)]
    largest = max((abs(flow.residual_w) / flow.delivered_w for flow in flows.values() if flow.delivered_w > 0.0), default=0.0)
    return [
        "",
        title_line("Power", style),
        *table(headings, rows, style),
        f"  left over by the solution's tolerance: {largest:.1g} of what is delivered",
    ]


_FLOW_ROWS: tuple[tuple[str, Callable[[PowerFlow], float]], ...] = (
    ("delivered", lambda flow: flow.delivered_w),
    ("absorbed by loads", lambda flow: flow.absorbed_w),
    ("dissipated", lambda flow: flow.lost_w),
    ("into storage", lambda flow: flow.stored_w),
)
_SHARED = ("absorbed by loads", "dissipated")


def _rounded(value: float, size: float) -> float:
    """0 for what is nothing but rounding beside `size`."""
    return 0.0 if abs(value) < _ROUNDING * abs(size) else value
