"""From syntax trees to the checked, flat circuit: the order in which the parts of this stage work, and all that is wrong in one go."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Final

from polewise.circuit import event_messages, file_messages, values
from polewise.circuit.blocks import finish_block, work_out_block
from polewise.circuit.boxes import electrical, finish_box
from polewise.circuit.check import check_overrides, check_values, near_names, order_samplers
from polewise.circuit.declare import declare
from polewise.circuit.device_settings import device_settings
from polewise.circuit.domains import find_domains
from polewise.circuit.events import finish_event, finish_sequence
from polewise.circuit.expansion import Expansion, TooLarge
from polewise.circuit.load import Sources
from polewise.circuit.lower import lower
from polewise.circuit.model import (
    AssemblyInstance,
    Branch,
    Circuit,
    CircuitNode,
    Device,
    Law,
    Path,
    PortDef,
    StudyDef,
)
from polewise.circuit.near import nearest
from polewise.circuit.studies import check_study_givens, declare_study_givens, finish_study
from polewise.circuit.tables import build_table
from polewise.circuit.things import (
    BlockThing,
    BoxThing,
    DefinitionThing,
    DeviceThing,
    GivenThing,
    InputThing,
    InstanceThing,
    LatchThing,
    SequenceThing,
    SignalThing,
    SolveThing,
    StateThing,
    Thing,
    ValueThing,
)
from polewise.devices import catalogue
from polewise.expression.collection import no_collection
from polewise.grammar import syntax
from polewise.grammar.diagnostics import Diagnostic
from polewise.grammar.source import no_span

assert catalogue.KINDS  # the registry is full once this module is imported


def expand(
    sources: Sources, *, overrides: Mapping[str, str | float] | None = None, study: str | None = None
) -> tuple[Circuit | None, tuple[Diagnostic, ...]]:
    """Expand a netlist.

    Args:
        sources: what circuit.load read; its own diagnostics are not repeated here.
        overrides: path of a given → value as text, "200 uH", "true", or a number in SI; they count before everything the files say.
        study: the study whose givens apply.
    Returns:
        The circuit, None where there are errors (those of `sources` included), and what is wrong or doubtful, in the order of the text.
    """
    with no_collection():
        return _expand(sources, overrides or {}, study)


def _expand(sources: Sources, overrides: Mapping[str, str | float], study: str | None) -> tuple[Circuit | None, tuple[Diagnostic, ...]]:
    x = Expansion(overrides)
    _wire_up(x, sources)
    studies: dict[str, StudyDef] = {}
    try:
        declare(x, sources.statements)
        if study is not None:
            if study not in x.studies_by_name:
                x.report.add(event_messages.unknown_study(no_span("study"), study, nearest(study, x.studies_by_name)))
            declare_study_givens(x, study)
        find_domains(x)
        _finish(x)
        for name, thing in x.studies_by_name.items():
            _guarded(x, thing, lambda x, t: studies.update({t.flat: finish_study(x, t)}))
            if name != study:
                check_study_givens(x, thing)
        check_values(x)
        check_overrides(x)
        near_names(x)
        order_samplers(x)
    except TooLarge:
        return None, _in_order(x, sources)
    if x.report.has_errors or sources.has_errors:
        return None, _in_order(x, sources)
    return _circuit(x, sources, studies), _in_order(x, sources)


def _wire_up(x: Expansion, sources: Sources) -> None:
    x.lower = lambda e, env: lower(x, e, env)
    x.csv = sources.csv
    x.report.take_over(sources.broken_names, sources.lacks_files, sources.reported)
    x.makers = {
        GivenThing: values.work_out_given,
        InputThing: values.work_out_input,
        StateThing: values.work_out_state,
        SolveThing: values.work_out_solve,
        LatchThing: values.work_out_latch,
        BlockThing: work_out_block,
    }


def _in_order(x: Expansion, sources: Sources) -> tuple[Diagnostic, ...]:
    place = {name: k for k, name in enumerate(sources.files)}
    return tuple(sorted(x.report.found.values(), key=lambda d: (place.get(d.span.source.name, -1), d.span.start)))


# ---------------------------------------------------------------- second pass


def _guarded(x: Expansion, thing: Thing, make: Callable[..., object]) -> None:
    try:
        make(x, thing)
    except RecursionError:
        x.report.add(file_messages.too_deep(thing.span, thing.flat))


def _finish(x: Expansion) -> None:
    # Values first: all that others read by name is known then, and what met something unfinished is checked once more.
    for thing in x.order:
        if isinstance(thing, ValueThing):
            _guarded(x, thing, Expansion.ensure)
    for thing in x.recheck:
        _guarded(x, thing, values.lower_again)
    for thing in x.order:
        finish = _FINISH.get(type(thing))
        if finish is not None:
            _guarded(x, thing, finish)
    into = (x.time_events, x.clock_events, x.condition_events)
    for statement, env in x.events:
        finish_event(x, statement, env, into)


def _finish_device(x: Expansion, thing: DeviceThing) -> None:
    kind, statement = thing.kind, thing.written
    positional = statement.arguments[len(kind.terminals) :]
    by_name = [s for s in statement.settings if s.name not in kind.terminals]
    settings = device_settings(x, kind, thing.env, positional, by_name, statement.kind_span, {})
    for node in thing.terminals.values():
        if node is not None and not electrical(x, node.key, statement.kind_span, kind.name):
            return
    if settings is None:
        return
    terminals = {name: x.root(node.key) for name, node in thing.terminals.items() if node is not None}
    ends = dict(terminals)
    for name, node in thing.terminals.items():
        if node is None:
            ends[name] = f"{thing.flat}.{name}#open"
            x.add_node(ends[name], thing.scope, thing.span, False)
    branches = {slot.suffix: thing.slot_name(slot.suffix) for slot in kind.slots}
    x.devices[thing.flat] = Device(thing.flat, kind.name, terminals, settings, branches, {}, thing.scope.path, thing.span)
    for slot in kind.slots:
        name = branches[slot.suffix]
        x.branches[name] = Branch(
            name, ends[slot.left], ends[slot.right], Law.DEVICE, None, None, thing.scope.path, thing.span, device=thing.flat, slot=slot.suffix
        )


def _finish_box(x: Expansion, box: BoxThing) -> None:
    finish_box(x, box)
    for latch in box.latches.values():
        values.finish_latch(x, latch)


def _finish_definition(x: Expansion, thing: DefinitionThing) -> None:
    if isinstance(thing.written, syntax.Table) and thing.number == -1:
        build_table(x, thing)


_FINISH: Final[dict[type, Callable[..., None]]] = {
    BoxThing: _finish_box,
    DeviceThing: _finish_device,
    GivenThing: values.finish_given,
    InputThing: values.finish_input,
    SignalThing: values.finish_signal,
    StateThing: values.finish_state,
    SolveThing: values.finish_solve,
    LatchThing: values.finish_latch,
    BlockThing: finish_block,
    SequenceThing: finish_sequence,
    DefinitionThing: _finish_definition,
}


# ---------------------------------------------------------------- the result


def _circuit(x: Expansion, sources: Sources, studies: dict[str, StudyDef]) -> Circuit:
    nodes: dict[str, CircuitNode] = {}
    aliases: dict[str, str] = {}
    for flat, record in x.nodes.items():
        root = x.root(flat)
        if root != flat:
            aliases[flat] = root
        else:
            nodes[flat] = CircuitNode(flat, x.domain(flat), flat in x.references, record.named, record.owner, record.span)
    ports: dict[str, PortDef] = {}
    assemblies: dict[str, AssemblyInstance] = {}
    for thing in x.order:
        if isinstance(thing, InstanceThing):
            of_instance = {}
            for port in thing.inner.ports:
                of_instance[port.flat.rpartition(".")[2]] = root = x.root(port.key)
                if root != port.flat:
                    aliases[port.flat] = root
                current = x.port_current(port)
                if current is not None:
                    ports[port.flat] = PortDef(port.flat, root, current)
            assemblies[thing.flat] = AssemblyInstance(thing.flat, thing.kind, of_instance, thing.document, thing.span)
    paths: dict[str, Path] = {}
    for path in x.paths:
        only = path.only
        if only is not None and only.flat != path.flat:
            aliases[path.flat] = only.flat
        items = tuple(tuple(box.flat for box in item) for item in path.items)
        paths[path.flat] = Path(path.flat, x.root(path.left.key), x.root(path.right.key), items, path.scope.path, path.span)
    return Circuit(
        graph=x.graph,
        title=sources.title,
        nodes=nodes,
        branches=x.branches,
        devices=x.devices,
        paths=paths,
        signals=x.signals,
        states=x.states,
        unknowns=x.unknowns,
        rates=x.rates,
        latches=x.latches,
        samplers=tuple(x.samplers.values()),
        delays=x.delays,
        averages=x.averages,
        time_events=tuple(x.time_events),
        clock_events=tuple(x.clock_events),
        condition_events=tuple(x.condition_events),
        ports=ports,
        assemblies=assemblies,
        givens=x.givens,
        studies=studies,
        files=sources.files,
        aliases=aliases,
        inputs=tuple(x.inputs),
        names=x,
    )
