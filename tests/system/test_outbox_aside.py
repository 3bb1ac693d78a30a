"""A message damaged in the outbox, with the real journal, writer, publisher and broker."""

from __future__ import annotations

import threading
from pathlib import Path

from mqtt_peers import FAST, Ear, Mosquitto, running, wait_until

from daq.clock import RealClock
from daq.engine import Engine
from daq.entries import SPOOL
from daq.inlet import Acked, Inlet
from daq.publish import BrokerSettings, Publisher
from daq.records import ConditionChanged, Finding
from daq.store.journal import Journal, JournalReader
from daq.store.rows import Batch, OutboxNew
from daq.writer import Writer

TOPIC = "upturn/1/s/event/H1/-"


def _filled(folder: Path, damaged: tuple[int, ...]) -> Journal:
    """A journal with ten messages, some of which a disk has changed."""
    journal = Journal.open(folder, site="s")
    rows = tuple(OutboxNew(f"m{n}", TOPIC, b'{"id":"m%d"}' % n) for n in range(1, 11))
    journal.commit(Batch(outbox=rows))
    for seq in damaged:
        journal._connection().execute("UPDATE outbox SET payload = x'7b7d' WHERE seq = ?", (seq,))
    return journal


def test_a_damaged_message_is_set_aside_and_told_and_all_others_arrive_in_order(tmp_path: Path) -> None:
    """One bad row must not hold up every alarm behind it for ever."""
    record = tmp_path / "record"
    with running(Mosquitto(tmp_path)) as broker, _filled(record, (1, 4, 5)) as journal:
        (record / SPOOL).mkdir()
        inlet, clock, stop = Inlet(100), RealClock(), threading.Event()
        said: list[Finding] = []
        ear = Ear(broker.port, "upturn/1/s/event/#")
        publisher = Publisher(
            BrokerSettings(port=broker.port), site="s", host="h", pace=FAST,
            on_acked=lambda seqs: inlet.news(Acked(seqs)), on_trouble=lambda *trouble: None,
        )  # fmt: skip
        writer = Writer(
            journal, Engine(), inlet, clock, site="s", host_status={}, publisher=publisher,
            say=said.append, line=lambda text: None,
        )  # fmt: skip
        thread = threading.Thread(target=writer.run, args=(stop,))
        try:
            publisher.start(writer.backlog)
            thread.start()
            assert wait_until(lambda: len(said) >= 6 and not journal.outbox(), 20.0)
            assert wait_until(lambda: len(ear.messages) >= 13)
        finally:
            stop.set()
            thread.join(10.0)
            publisher.stop(1.0)
            ear.close()
        assert ear.ids()[:7] == ["m2", "m3", "m6", "m7", "m8", "m9", "m10"]
        alarms = [f for f in said if f.fields["alarm"] == "message_damaged"]
        assert [f.id for f in alarms] == ear.ids()[7:]  # the words about it went out as well
        assert [f.fields["state"] for f in alarms] == ["unacknowledged", "returned_unacknowledged"] * 3
        assert {f.fields["priority"] for f in alarms} == {"low"}
        told = [f.message for _, f in journal.facts() if isinstance(f, ConditionChanged)]
        for text, (seq, why) in zip(told, journal.aside(), strict=True):
            assert f"row {seq}: got other bytes" in text
            assert f"id 'm{seq}'" in text
            assert why in text
        assert [seq for seq, _ in journal.aside()] == [1, 4, 5]
        kept = journal._connection().execute("SELECT payload FROM outbox WHERE acked = 2").fetchall()
        assert kept == [(b"{}",)] * 3
    with Journal.open(record, site="s") as journal:  # known damage is no reason to build everything anew
        assert not any("damaged" in n for n in journal.notices)
    with JournalReader(record) as reader:
        assert len(reader.aside()) == 3


def test_a_page_of_nothing_but_damaged_messages_does_not_look_like_the_end(tmp_path: Path) -> None:
    """Fewer rows than asked for mean that there are no more: what lies behind would wait for a restart."""
    with _filled(tmp_path / "record", (1, 2, 3, 6)) as journal:
        bad: list[int] = []
        rows = journal.outbox(limit=3, on_damage=lambda seq, why: bad.append(seq))
        assert [r.seq for r in rows] == [4, 5, 7]
        assert bad == [1, 2, 3, 6]
