"""From the record to a running engine: recovery, and the facts that a start itself makes."""

from __future__ import annotations

from collections.abc import Callable, Iterator

from daq import __version__
from daq.clock import Clock
from daq.core.rules import rules_to_json
from daq.engine import HOST, Engine
from daq.joining import joined
from daq.records import ConditionChanged, EngineStarted, Fact, Finding, RecordError, RulesAdopted
from daq.settings import Lab
from daq.store.journal import Journal
from daq.store.rows import Batch

LINKS = ("link_lost", "identity_wrong")


def recover(
    journal: Journal, say: Callable[[str], None], reached: Callable[[int], None] = lambda seq: None
) -> tuple[Engine, int | None]:
    """Rebuild the engine from the newest valid snapshot and the facts after it.

    ``reached`` is told how far the record is read, each time something of it was replayed.
    Returns the engine and the UTC tick at which the record ended (None in a new journal). With
    another version's snapshots, or a damaged one, everything is rebuilt from the facts.
    """
    engine = Engine()
    after = 0
    host = journal.snapshot(HOST, __version__)
    if host is not None and host.seq is not None:
        try:
            engine.restore(HOST, host.data)
            for name in engine.wanted:
                own = journal.snapshot(name, __version__)
                if own is None or own.seq != host.seq:
                    raise RecordError(f"snapshot {name!r}: wanted one of fact {host.seq}")
                engine.restore(name, own.data)
            after = host.seq
        except RecordError as error:
            say(f"rebuilding from the first fact: {error}")
            engine, after = Engine(), 0
    new: list[Finding] = []
    stored = journal.facts(after=after, on_damage=lambda trouble: say(f"left out: {trouble}"))
    read = after

    def facts() -> Iterator[Fact]:
        nonlocal read
        for seq, fact in stored:
            read = seq
            yield fact

    for fact in joined(facts()):
        new += [f for f in engine.take(fact) if not journal.has_finding(f.id)]
        reached(read)
    if new:
        # a later version may conclude more from the same facts: kept as findings, never published again
        journal.commit(Batch(findings=tuple(new)))
        say(f"version {__version__} concludes {len(new)} findings more; they are kept, not published")
    ends = [s.clock.latest + s.clock.utc_lead for s in engine.tests.values()]
    return engine, max(ends, default=None)


def first_facts(lab: Lab, engine: Engine, clock: Clock, ended: int | None) -> Iterator[Fact]:
    """Yield what a start is to the record: itself, what no longer stands, and rules that are new.

    A condition that stood when the daemon ended would stand for ever if whoever watches it has
    forgotten that it was told. What an instrument will tell itself (:func:`standing`) is left to it.
    """
    stamp = clock.stamp()
    yield EngineStarted(stamp, __version__, ended)
    own = {i.name for i in lab.instruments}
    for alarm, subject in sorted(_seen(engine)):
        if alarm != "quarantined" and not (alarm in LINKS and subject in own):
            message = "looked at anew since the daemon was started"
            yield ConditionChanged(stamp, HOST, subject, alarm, False, message)
    for frame in lab.frames:
        for rules in frame.tests:
            text = rules_to_json(rules)
            known = engine.tests.get(rules.test)
            if known is None or known.rules != text:
                yield RulesAdopted(stamp, frame.name, rules.test, text)


def standing(engine: Engine, instrument: str) -> bool:
    """Say whether an instrument's link counts as lost in the record."""
    return any(alarm in LINKS and subject == instrument for alarm, subject in _seen(engine))


def _seen(engine: Engine) -> set[tuple[str, str]]:
    return {(a.alarm, a.subject) for a in engine.host.alarms.alarms if a.seen}
