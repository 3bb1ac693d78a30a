"""The archive of one test in one file: written from a journal, read and judged without it.

A zip without compression that holds the sealed record (SQLite), the same scans as text, the findings as
they were concluded live, a manifest and a list of checksums. The sealed record is what counts;
the text is there for whoever has neither this program nor a reader of its chunks.
"""

from __future__ import annotations

import gzip
import hashlib
import io
import json
import tempfile
from collections.abc import Iterator
from contextlib import closing, contextmanager
from dataclasses import dataclass, replace
from importlib.resources import files
from pathlib import Path
from typing import IO, Any, Final

from daq import __version__, export
from daq.container import (
    ContainerError,
    is_as_made,
    read_container,
    sha256_of,
    write_container,
    write_sums,
    wrong_sums,
)
from daq.export import ExportError
from daq.lines import iso_utc
from daq.records import EngineStarted, Fact, Finding, RulesAdopted, ScansTaken, Stamp, UpturnError
from daq.store.archive import HOST_PART, Stretch, archive_facts, chunks_of, runs_of, write_archive
from daq.store.errors import JournalDamaged, JournalError
from daq.store.journal import JournalReader
from daq.store.reading import OnDamage
from daq.store.segments import about_of, open_to_read
from daq.store.survey import Survey, TestRun, specimen_of
from daq.store.verify import DAMAGE, Trouble, verify_sealed

FORMAT: Final = "upturn-archive-1"
MANIFEST: Final = "manifest.json"
RECORD: Final = "record"
READINGS: Final = "readings.csv.gz"
FINDINGS: Final = "findings.jsonl"
README: Final = "README.txt"
WANTED: Final = {MANIFEST, READINGS, FINDINGS, README}


class BundleError(UpturnError):
    """It is no archive of a test, or does not hold what it says."""


@dataclass(frozen=True, slots=True)
class Archive:
    """An archive that was unpacked to ``record``; reads like the journal it came from."""

    folder: Path
    record: Path
    test: str
    specimen: str
    stretch: Stretch
    on_damage: OnDamage | None = None

    def frames(self) -> list[str]:
        """Return its one frame."""
        return [self.stretch.frame]

    def facts(self, *, frame: str | None = None) -> Iterator[tuple[int, Fact]]:
        """Yield (seq, fact) of the test's frame and of the host; rules of other places there left out."""
        for seq, fact in archive_facts(self.record, self.stretch, self.on_damage):
            if not isinstance(fact, RulesAdopted) or fact.test == self.test:
                yield seq, fact

    def is_of(self, finding: Finding) -> bool:
        """Say whether a finding is about this test (a specimen in its place)."""
        return finding.id.startswith(f"{self.test}|{self.specimen}|")


# --- writing --------------------------------------------------------------------------------


def write_bundle(journal: Path, wanted: str, path: Path) -> tuple[dict[str, Any], list[str]]:
    """Write the archive of one test to ``path``; return its manifest and what a person should know.

    Args:
        wanted: ``FRAME[/POSITION]``, the newest test there, or with ``@N`` the N-th, or ``@SPECIMEN``.

    Raises:
        ExportError: there is no such test, or the archive cannot be written.
        JournalError: the journal cannot be read.
    """
    with JournalReader(journal) as reader:
        run, runs = _choose(reader, wanted)
        mine, upto = _findings(reader, run)
    # a specimen that hung here before goes on counting its findings: its archive begins there
    first = min(r.first for r in runs if (r.test, r.specimen) == (run.test, run.specimen))
    stretch = Stretch(run.frame, first, upto if run.last is None else run.last)
    try:
        # beside the archive: where that has room, there is room for this
        with tempfile.TemporaryDirectory(prefix=".upturn-", dir=path.parent) as name:
            folder = Path(name)
            (folder / RECORD).mkdir()
            notices = write_archive(journal, stretch, folder / RECORD)
            archive = Archive(path, folder / RECORD, run.test, run.specimen, stretch, _pass_over)
            with (folder / FINDINGS).open("w", encoding="utf-8", newline="\n") as out:
                count = export.write_findings(mine, out)
            (folder / README).write_text(_readme(), encoding="utf-8")
            try:
                with (folder / READINGS).open("wb") as raw:
                    _write_readings(archive, raw)
                manifest = _manifest(archive, run.last is None, count)
            except JournalError as error:
                raise ExportError(f"{path}: not written: {error}") from error
            text = json.dumps(manifest, indent=1, sort_keys=True, ensure_ascii=False)
            (folder / MANIFEST).write_text(text + "\n", encoding="utf-8")
            write_sums(folder)
            _place(folder, path)
    except OSError as error:
        raise ExportError(f"{path}: cannot write: {error.strerror or error}") from error
    return manifest, notices


def _pass_over(damage: JournalDamaged) -> None:
    """Damage in the source goes along in the record; the text and the manifest leave it out."""


def last_hash(manifest: dict[str, Any]) -> str | None:
    """Return the newest chain value of the test's frame that the journal itself sealed; None if none."""
    sealed = [c for c in manifest["chunks"] if c["file"] != HOST_PART and c["sealed"]]
    return str(max(sealed, key=lambda c: c["last_seq"])["chain"]) if sealed else None


def _place(folder: Path, path: Path) -> None:
    """Write the container beside its place and rename it: an archive is whole or not there."""
    fresh = path.with_name(path.name + ".new")
    try:
        write_container(folder, fresh)
        fresh.replace(path)
    finally:
        fresh.unlink(missing_ok=True)


def _choose(reader: JournalReader, wanted: str) -> tuple[TestRun, list[TestRun]]:
    test, _, which = wanted.partition("@")
    frame = test.partition("/")[0]
    known = reader.frames()
    if frame not in known:
        raise ExportError(f"--test: got {wanted!r}, wanted one of frame {', '.join(known) or '(none)'}")
    runs = [r for r in runs_of(reader, frame) if r.test == test]
    named = [r for r in runs if not which or r.specimen == which]
    if not named and which.isascii() and which.isdigit() and 0 < int(which[:9]) <= len(runs):
        named = [runs[int(which[:9]) - 1]]
    if not named:
        there = ", ".join(f"{r.test}@{r.specimen}" for r in runs) or "none in that place"
        raise ExportError(f"--test: got {wanted!r}, wanted a test that is in the record: {there}")
    return named[-1], runs


def _findings(reader: JournalReader, run: TestRun) -> tuple[list[Finding], int]:
    """Return the findings of a test and the number of the newest fact that they can rest on."""
    for _ in range(20):  # both of one moment, while a daemon may be writing
        before = reader.last_seq
        prefix = f"{run.test}|{run.specimen}|"
        mine = [f for _, f in reader.findings(test=run.test) if f.id.startswith(prefix)]
        if reader.last_seq == before:
            break
    return mine, before


def _write_readings(archive: Archive, raw: IO[bytes]) -> int:
    """Write the scans as a recording, packed by gzip without a time or a name in it."""
    columns: list[str] = []
    for _, fact in archive.facts():
        if isinstance(fact, ScansTaken):
            columns += [c for c in fact.channels if c not in columns]
    with (
        gzip.GzipFile(filename="", mode="wb", fileobj=raw, mtime=0, compresslevel=6) as packed,
        io.TextIOWrapper(packed, encoding="utf-8", newline="\n", write_through=True) as text,
    ):
        return export.write_recording(archive, archive.stretch.frame, columns, text)


def _manifest(archive: Archive, running: bool, findings: int) -> dict[str, Any]:
    rules: list[dict[str, Any]] = []
    versions: list[dict[str, Any]] = []
    scans = readings = 0
    ticks: list[int] = []
    for seq, fact in archive.facts():
        if isinstance(fact, RulesAdopted):
            of_this = specimen_of(fact) == archive.specimen
            if of_this:
                rules.append(
                    {
                        "seq": seq, "at": _at(fact.stamp), "retroactive": fact.retroactive,
                        "rules": json.loads(fact.rules),
                    }
                )  # fmt: skip
        elif isinstance(fact, EngineStarted):
            versions.append({"seq": seq, "at": _at(fact.stamp), "version": fact.version})
        elif isinstance(fact, ScansTaken) and len(fact):
            scans += len(fact)
            readings += fact.values.size
            low, high = int(fact.utc_tick.min()), int(fact.utc_tick.max())
            ticks = [min([low, *ticks[:1]]), max([high, *ticks[1:]])]
    parts = sorted(archive.record.glob("*.sqlite"))
    about = _about(parts[0])
    return {
        "format": FORMAT,
        "written_by": __version__,
        "site": about["site"],
        "journal": about["journal"],
        "frame": archive.stretch.frame,
        "test": archive.test,
        "specimen": archive.specimen,
        "running": running,
        "first_seq": archive.stretch.first,
        "last_seq": archive.stretch.last,
        "from": iso_utc(ticks[0]) if ticks else None,
        "to": iso_utc(ticks[1]) if ticks else None,
        "scans": scans,
        "readings": readings,
        "findings": findings,
        "rules": rules,
        "versions": versions,
        "chunks": [c for part in parts for c in chunks_of(part)],
    }


def _about(part: Path) -> dict[str, str]:
    with closing(open_to_read(part)) as connection:
        return about_of(connection, part)


def _at(stamp: Stamp) -> str:
    return iso_utc(stamp.utc_tick)


def _readme() -> str:
    return files("daq").joinpath("archive_readme.txt").read_text(encoding="utf-8")


# --- reading --------------------------------------------------------------------------------


@contextmanager
def opened(path: Path) -> Iterator[Archive]:
    """Unpack an archive to a folder that goes again, once its checksums were compared.

    Raises:
        BundleError: it is no archive of a test, or is damaged: ``verify`` says all of it.
    """
    with tempfile.TemporaryDirectory(prefix="upturn-") as name:
        folder = Path(name)
        _unpack(path, folder)
        for file, got, wanted in wrong_sums(folder):
            raise BundleError(f"{path} {file}: got {got}, wanted {wanted}; see upturn verify {path}")
        yield _archive(path, folder, _read_manifest(path, folder))


def _unpack(path: Path, folder: Path) -> None:
    try:
        read_container(path, folder)
    except ContainerError as error:
        raise BundleError(str(error)) from error


def _read_manifest(path: Path, folder: Path) -> dict[str, Any]:
    try:
        manifest = json.loads((folder / MANIFEST).read_text(encoding="utf-8"))
        known = manifest["format"]
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise BundleError(f"{path} {MANIFEST}: got {error}, wanted the manifest of an archive") from error
    if known != FORMAT:
        raise BundleError(f"{path} {MANIFEST}: got format {known!r}, this program reads {FORMAT!r}")
    return dict(manifest)


def _archive(path: Path, folder: Path, manifest: dict[str, Any]) -> Archive:
    try:
        stretch = Stretch(manifest["frame"], int(manifest["first_seq"]), int(manifest["last_seq"]))
        return Archive(path, folder / RECORD, manifest["test"], manifest["specimen"], stretch)
    except (KeyError, TypeError, ValueError) as error:
        raise BundleError(f"{path} {MANIFEST}: got no {error}, wanted the manifest of an archive") from error


def verify_bundle(path: Path, survey: Survey) -> Iterator[Trouble]:
    """Yield everything that is wrong with an archive; nothing where every byte is as it was written."""

    def damage(file: str, got: str, wanted: str) -> Trouble:
        return Trouble(DAMAGE, f"{path} {file}".rstrip(), got, wanted, file or path.name)

    with tempfile.TemporaryDirectory(prefix="upturn-") as name:
        folder = Path(name)
        try:
            _unpack(path, folder)
        except BundleError as error:
            yield damage("", str(error), "an archive that can be read to its end")
            return
        wrong = wrong_sums(folder)
        yield from (damage(*w) for w in wrong)
        there = {p.relative_to(folder).as_posix() for p in folder.rglob("*") if p.is_file()}
        for file in sorted(WANTED - there):
            yield damage(file, "no such file", "a whole archive")
        if not wrong and not is_as_made(path, folder):
            yield damage("", "other bytes between the files, which are all sound", "those of the container")
        for part in sorted((folder / RECORD).glob("*.sqlite")):
            # a copy: what is said of it names the archive, and the checksum above was of the other
            seen = survey if part.name != HOST_PART else Survey(files=survey.files)
            for t in verify_sealed(part, seen):
                place = t.place.replace(str(folder), str(path))
                got = t.got.replace(str(folder), str(path))
                yield Trouble(t.kind, place, got, t.wanted, f"{RECORD}/{part.name}", t.frame, t.first, t.last)
        yield from (damage(*w) for w in _compare(path, folder))


def _compare(path: Path, folder: Path) -> Iterator[tuple[str, str, str]]:
    """Compare the manifest and the text with the facts; yield (file, got, wanted)."""
    try:
        told = _read_manifest(path, folder)
        archive = replace(_archive(path, folder, told), on_damage=_pass_over)
        findings = (folder / FINDINGS).read_bytes().count(b"\n")
        holds = _manifest(archive, bool(told.get("running")), findings)
        holds["written_by"] = told.get("written_by")
        for key in sorted(told.keys() | holds.keys()):
            if told.get(key) != holds.get(key):
                got, wanted = _short(told.get(key)), _short(holds.get(key))
                yield MANIFEST, f"{key} {got}", f"{wanted} as in the record"
        if _text_of(folder / READINGS) != _text_again(archive, folder):
            yield READINGS, "other scans", "those of the record"
    except BundleError as error:
        yield MANIFEST, str(error), "the manifest of this archive"
    except (JournalError, OSError, EOFError, UpturnError) as error:
        yield RECORD, str(error), "facts that can be read"


def _short(value: Any) -> str:
    text = json.dumps(value, ensure_ascii=False)
    return text if len(text) <= 80 else f"{text[:77]}..."


def _text_of(packed: Path) -> str:
    """Return the checksum of the text in a gzip file: another zlib may have packed it otherwise."""
    digest = hashlib.sha256()
    with gzip.open(packed) as source:
        while piece := source.read(1 << 20):
            digest.update(piece)
    return digest.hexdigest()


def _text_again(archive: Archive, folder: Path) -> str:
    again = folder / "again"
    with again.open("wb") as raw:
        _write_readings(archive, raw)
    try:
        return _text_of(again)
    finally:
        again.unlink()


def is_bundle(path: Path) -> bool:
    """Say whether ``path`` is meant to be an archive: by its first bytes, or by its name."""
    try:
        with path.open("rb") as file:
            return file.read(4) == b"PK\x03\x04" or path.suffix == ".zip"
    except OSError:
        return False


__all__ = ["Archive", "BundleError", "is_bundle", "opened", "sha256_of", "verify_bundle", "write_bundle"]
