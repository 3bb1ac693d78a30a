"""One function a command: from parsed arguments to an exit code."""

from __future__ import annotations

import sys
import time
from argparse import Namespace
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from pathlib import Path
from typing import TYPE_CHECKING, Final, TypeVar

from daq.exits import BROKEN, BUSY, INPUT, OK, TROUBLE, USAGE
from daq.records import Fact, Finding, UpturnError

if TYPE_CHECKING:  # a command imports what it needs when it runs, so that --help costs nothing
    from daq.bundle import Archive
    from daq.lines import HowAt
    from daq.recording import Recording
    from daq.settings import Frame, Lab

T = TypeVar("T")


class CommandError(UpturnError):
    """The arguments do not fit together, or name something that is not there."""


def run(args: Namespace) -> int:
    """Watch the frames of a lab file until told to stop."""
    from daq import daemon, settings

    lab = settings.load(args.lab)
    settings.must_be_ready(lab)
    view = sys.stdout.isatty() and sys.stdin.isatty() and not args.plain
    return daemon.run(lab, seconds=args.seconds, view=view)


def watch(args: Namespace) -> int:
    """Look at a journal, live or at rest."""
    from daq.entries import write_entry
    from daq.view.source import JournalSource
    from daq.view.watch import watch as look

    folder = journal_of(args.journal)

    def enter(frame: str, entry: str, initials: str, values: dict[str, object], note: str = "") -> None:
        write_entry(folder, frame, entry, initials, values, note)

    return look(JournalSource(folder), enter=enter)


def tell(args: Namespace) -> int:
    """Make an operator entry through the spool folder."""
    from daq.entries import REFUSED, check_place, write_entry
    from daq.store.journal import JournalReader

    folder = journal_of(args.lab)
    frame, _, position = args.frame.partition("/")
    if frame == "host":
        frame = ""
    with JournalReader(folder) as reader:
        tests = [name for name in reader.status() if name] or reader.frames()
    check_place(frame, position, tests)
    values: dict[str, object] = {}
    if position:
        values["position"] = position
    if args.alarm:
        values["alarm"] = args.alarm
    if args.subject:
        values["subject"] = args.subject
    if args.hours is not None:
        values["hours"] = args.hours
    if args.minutes_ago:
        values["minutes_ago"] = args.minutes_ago
    path = write_entry(folder, frame, args.entry, args.initials, values, args.note)
    for _ in range(20):  # say whether the daemon took it, when it is running
        if not path.exists():
            aside = path.with_name(f"{REFUSED}{path.name}")
            if aside.exists():
                raise CommandError(
                    f"{args.frame}: {args.entry} was refused by the daemon; its alarm entry_refused says why"
                    f" (the entry is kept in {aside})"
                )
            print(f"{args.frame}: {args.entry} entered by {args.initials}")
            return OK
        time.sleep(0.1)
    print(f"{args.frame}: {args.entry} waits in {path} for the daemon, which does not seem to be running")
    return TROUBLE


def replay(args: Namespace) -> int:
    """Run a recording, a journal or an archive through the engine."""
    with ExitStack() as unpacked:
        return _replay(args, unpacked)


def _replay(args: Namespace, unpacked: ExitStack) -> int:
    from daq import bundle, export, replay
    from daq.engine import Engine
    from daq.joining import joined
    from daq.lines import iso_utc, json_line, plain_line

    tally, engine = replay.Tally(), Engine()
    archive: Archive | None = None
    how_at: HowAt = iso_utc
    plain_at: HowAt | None = None
    total: Callable[[], float] | None = None
    if args.source.is_dir():
        facts, whole = _journal_to_replay(args), True
    elif bundle.is_bundle(args.source):
        if args.rules is not None or args.frame is not None:
            raise CommandError("got --rules or --frame with an archive, wanted neither: it has its own")
        archive = unpacked.enter_context(bundle.opened(args.source))
        facts, whole = joined(fact for _, fact in archive.facts()), True
    else:
        frame, recording = _recording_to_replay(args)
        for note in recording.notes:
            print(f"upturn replay: {note}", file=sys.stderr)
        facts, whole = replay.recording_facts(recording, frame), False
        how_at = plain_at = recording.how_at
        total = lambda: recording.done / max(recording.size, 1)  # noqa: E731
    if args.cut is not None:
        facts = replay.cut_at_random(facts, args.cut)
    found = replay.run(facts, tally, engine)
    if archive is not None:
        found = (f for f in found if archive.is_of(f))
    shown = _with_progress(found, total)
    if args.findings is None:
        for finding in shown:
            print(plain_line(finding, plain_at))
    else:
        with export.open_out(args.findings, keep=args.source) as out:
            if whole:  # a journal: by time, as ``export --findings`` writes them; the tables last
                everything = list(shown)
                export.write_findings((f for f in everything if f.kind != "summary"), out)
                export.write_findings((f for f in everything if f.kind == "summary"), out)
            else:
                out.writelines(json_line(finding, how_at) + "\n" for finding in shown)
    print(f"upturn replay: {tally.say()}", file=sys.stderr)
    for line in replay.never_began(engine):
        print(f"upturn replay: {line}", file=sys.stderr)
    for test, why in engine.quarantined.items():
        print(f"upturn replay: {test}: quarantined: {why}", file=sys.stderr)
    return TROUBLE if engine.quarantined else OK


def _journal_to_replay(args: Namespace) -> Iterator[Fact]:
    from daq import replay
    from daq.store.journal import JournalReader

    if not args.source.joinpath("journal.sqlite").exists():
        raise CommandError(
            f"{args.source}: got a folder without a journal, wanted a journal folder or a CSV file"
        )
    if args.rules is not None:
        raise CommandError(
            "--rules: got it with a journal, wanted it with a recording only: a journal has its own"
        )
    if args.frame is not None:
        with JournalReader(args.source) as reader:
            known = reader.frames()
        if args.frame not in known:
            raise CommandError(f"--frame: got {args.frame!r}, wanted one of {', '.join(known)}")
    return replay.journal_facts(args.source, args.frame)


def _recording_to_replay(args: Namespace) -> tuple[Frame, Recording]:
    from daq import replay, settings
    from daq.recording import Recording, RecordingError

    if not args.source.exists():
        raise RecordingError(
            f"{args.source}: got no such file or folder, wanted a CSV recording or a journal"
        )
    if args.source.name == "journal.sqlite":
        raise CommandError(f"{args.source}: got a file of a journal, wanted its folder: {args.source.parent}")
    if args.rules is None or args.frame is None:
        raise CommandError("replay of a recording: wanted --rules LAB.yaml and --frame NAME")
    frame = _frame(settings.load(args.rules), args.frame)
    recording = Recording(args.source, frame.name, frame.columns)
    replay.check_starts(recording, frame)
    return frame, recording


def export_(args: Namespace) -> int:
    """Write raw readings or findings as plain files."""
    from daq import export
    from daq.store.journal import JournalReader

    if args.csv is None and args.findings is None and args.bundle is None:
        raise CommandError("export: wanted --csv OUT.csv, --findings OUT.jsonl or --bundle OUT.zip")
    if (args.bundle is None) != (args.test is None):
        raise CommandError("export --bundle: wanted --bundle OUT.zip and --test FRAME[/POSITION] together")
    if args.csv is not None and args.frame is None:
        raise CommandError("export --csv: wanted --frame NAME, a recording is of one frame")
    folder = journal_of(args.journal)
    with JournalReader(folder) as reader:
        known = reader.frames()
        if args.frame is not None and args.frame not in known:
            raise CommandError(f"--frame: got {args.frame!r}, wanted one of {', '.join(known)}")
        if args.csv is not None:
            columns = export.columns_of(reader, args.frame)  # before a file is begun, or written over
            with export.open_out(args.csv, keep=folder) as out:
                scans = export.write_recording(reader, args.frame, columns, out)
            print(f"upturn export: {scans} scans of {args.frame} to {args.csv}", file=sys.stderr)
        if args.findings is not None:
            mine = (
                f for _, f in reader.findings() if args.frame is None or f.frame.split("/")[0] == args.frame
            )
            with export.open_out(args.findings, keep=folder) as out:
                count = export.write_findings(mine, out)
            print(f"upturn export: {count} findings to {args.findings}", file=sys.stderr)
    return OK if args.bundle is None else _export_bundle(folder, args.test, args.bundle)


def _export_bundle(folder: Path, test: str, path: Path) -> int:
    from daq import bundle, export

    export.keep_apart(path, folder)
    manifest, notices = bundle.write_bundle(folder, test, path)
    for notice in notices:
        print(f"upturn export: damaged in the journal: {notice}", file=sys.stderr)
    print(
        f"upturn export: {manifest['test']} {manifest['specimen']}: {manifest['scans']} scans, "
        f"{len(manifest['chunks'])} chunks, {manifest['findings']} findings to {path}; "
        f"last hash {bundle.last_hash(manifest) or '(none sealed yet)'}; SHA-256 {bundle.sha256_of(path)}",
        file=sys.stderr,
    )
    return TROUBLE if notices else OK


def verify(args: Namespace) -> int:
    """Look for any change, gap or damage in the record."""
    from daq import checking

    return checking.command(args)


def adopt(args: Namespace) -> int:
    """Begin a new journal with the test in an archive."""
    from daq import bundle, settings
    from daq.adopt import adopt

    lab = settings.load(args.lab)
    if not bundle.is_bundle(args.bundle):
        raise CommandError(f"{args.bundle}: got no archive, wanted what export --bundle wrote")
    with bundle.opened(args.bundle) as archive:
        facts, findings = adopt(archive, lab, lambda text: print(f"upturn adopt: {text}", file=sys.stderr))
    print(f"{archive.test} {archive.specimen}: {facts} facts and {findings} findings in {lab.journal}")
    return OK


def prove(args: Namespace) -> int:
    """Run a campaign of simulated rigs like a frame."""
    from daq.prove.command import prove

    return prove(args)


def listen(args: Namespace) -> int:
    """Print what arrives at the broker."""
    from daq import settings
    from daq.publish import listen

    lab = settings.load(args.lab)
    if lab.broker is None:
        raise CommandError(f"{args.lab}: got no broker, wanted one to listen to")
    return listen(lab.broker, site=lab.site, topic=args.topic, count=args.count, seconds=args.seconds)


# --- shared -----------------------------------------------------------------------------


def journal_of(path: Path) -> Path:
    """Return the journal folder that ``path`` is, or that the lab file ``path`` names."""
    if path.is_dir():
        return path
    if path.suffix in (".yaml", ".yml") or path.is_file():
        from daq import settings

        return settings.load(path).journal
    raise CommandError(f"{path}: got no such folder, wanted a journal folder or a lab file")


def _frame(lab: Lab, name: str) -> Frame:
    for frame in lab.frames:
        if frame.name == name:
            return frame
    raise CommandError(f"--frame: got {name!r}, wanted one of {', '.join(f.name for f in lab.frames)}")


def _with_progress(items: Iterator[T], share: Callable[[], float] | None) -> Iterator[T]:
    """Pass items through; on a terminal a bar on stderr shows how much of the source is done."""
    if not sys.stderr.isatty():
        yield from items
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TaskProgressColumn, TextColumn, TimeElapsedColumn

    columns = (
        TextColumn("replay"),
        BarColumn(),
        TaskProgressColumn(),
        TimeElapsedColumn(),
        TextColumn("{task.fields[at]}"),
    )
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("replay", total=1.0 if share else None, at="")
        for item in items:
            if share:
                bar.update(task, completed=share())
            if isinstance(item, Finding) and item.test_h is not None:
                bar.update(task, at=f"{item.frame} {item.test_h:.1f} h")
            yield item


def exit_code(error: UpturnError) -> int:
    """Return the exit code that an error stands for."""
    from daq.adopt import AdoptError
    from daq.bundle import BundleError
    from daq.checking import CheckError
    from daq.export import ExportError
    from daq.recording import RecordingError
    from daq.settings import SettingsError
    from daq.store.errors import JournalBroken, JournalBusy, JournalError, JournalFull

    table: tuple[tuple[type[UpturnError], int], ...] = (
        (SettingsError, USAGE),
        (CommandError, USAGE),
        (CheckError, INPUT),
        (BundleError, INPUT),
        (AdoptError, INPUT),
        (JournalBusy, BUSY),
        (JournalBroken, BROKEN),
        (JournalFull, BROKEN),
        (RecordingError, INPUT),
        (ExportError, INPUT),
        (JournalError, INPUT),
    )
    return next((code for kind, code in table if isinstance(error, kind)), USAGE)


RUN: Final[dict[str, Callable[[Namespace], int]]] = {
    "run": run,
    "watch": watch,
    "tell": tell,
    "replay": replay,
    "export": export_,
    "listen": listen,
    "prove": prove,
    "verify": verify,
    "adopt": adopt,
}
