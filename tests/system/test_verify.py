"""Whatever is changed in the record is named, or it is shown that it lies where nothing stands."""

from __future__ import annotations

import gzip
import json
import shutil
import sqlite3
import threading
import zipfile
from collections.abc import Callable, Iterator
from contextlib import closing
from pathlib import Path
from random import Random

import pytest
from record_cases import facts, quick_folder, rules, scans, stamp, started

from daq import container
from daq.checking import check
from daq.cli import main
from daq.exits import DAMAGED, INPUT, OK
from daq.records import Fact, Finding, ScansTaken
from daq.store.errors import JournalError
from daq.store.journal import Journal
from daq.store.rows import Batch, OutboxNew, Snapshot
from daq.store.verify import NOTE


def write(folder: Path, lab: Path, change: Callable[[Fact], Fact] = lambda fact: fact) -> None:
    """Write a journal with something in every table, without the cost of an engine."""
    with Journal.open(folder, site="hall-a") as journal:
        for k, fact in enumerate(facts(lab)):
            found = Finding(f"H1|S-1|note|{k}|1", k, None, "H1", "note", {"k": k})
            journal.commit(
                Batch(
                    facts=(change(fact),),
                    findings=(found,),
                    outbox=(OutboxNew(f"m{k}", "t", b"payload"),),
                    snapshots=(Snapshot("H1", None, "0.1.0", b"state" * 20),),
                    status={"H1": {"k": k}},
                    inbox=(f"e{k}",),
                )
            )
            if k < 30 and k % 3 == 0:
                for frame in (*journal.frames(), ""):
                    journal.seal(frame)


@pytest.fixture(scope="module")
def house() -> Iterator[Path]:
    """A folder with the sound journal ``j`` and the archive ``a.zip`` of H1's first specimen."""
    with quick_folder() as folder:
        with pytest.MonkeyPatch.context() as patch:
            patch.setattr("daq.store.chunks.CHUNK_SCANS", 40)
            write(folder / "j", folder)
        args = ["export", str(folder / "j"), "--bundle", str(folder / "a.zip"), "--test", "H1@S-1"]
        assert main(args) == OK
        yield folder


@pytest.fixture
def copy(house: Path) -> Iterator[Path]:
    """A copy of the journal to be damaged."""
    with quick_folder() as folder:
        shutil.copytree(house / "j", folder / "j")
        yield folder / "j"


def flip(path: Path, at: int, bit: int) -> None:
    with path.open("r+b") as file:
        file.seek(at)
        (byte,) = file.read(1)
        file.seek(at)
        file.write(bytes([byte ^ 1 << bit]))


def said(place: Path) -> list[str]:
    """Return what is wrong with ``place``, as texts; what is known and explained left out."""
    try:
        return [str(t) for t in check(place).troubles if t.kind != NOTE]
    except JournalError as error:  # the format's number became that of a later program
        return [str(error)]


def meaning(path: Path) -> list[str]:
    """Return everything that an SQLite file says, but for what is made anew at each start."""
    with closing(sqlite3.connect(f"file:{path}?mode=ro&immutable=1", uri=True)) as db:
        text = list(db.iterdump())
    working = (
        'INSERT INTO "status"',
        'INSERT INTO "inbox"',
        'INSERT INTO "sqlite_sequence"',
        "INSERT INTO \"meta\" VALUES('site'",
    )
    return [t for t in text if not t.startswith(working)]


def no_marks(lines: list[str]) -> list[str]:
    """Leave out the mark of delivery of each message: the one value of a checked row without a checksum."""
    return [",".join(t.split(",")[:5]) if t.startswith('INSERT INTO "outbox"') else t for t in lines]


@pytest.mark.parametrize(("file", "places"), [("tests/H1.sqlite", 200), ("journal.sqlite", 120)])
def test_a_flipped_bit_anywhere_is_named_or_lies_where_nothing_stands(
    copy: Path, file: str, places: int
) -> None:
    """Places in equal steps through the file. Not named: then every value in every table is as it was."""
    victim, random = copy / file, Random(7)
    sound, size = no_marks(meaning(victim)), victim.stat().st_size
    assert said(copy) == []
    named = 0
    for k in range(places):
        at, bit = k * size // places + random.randrange(size // places), random.randrange(8)
        flip(victim, at, bit)
        troubles = said(copy)
        if troubles:
            named += 1
            assert any(victim.name in t for t in troubles), troubles
        else:
            assert no_marks(meaning(victim)) == sound, f"byte {at}, bit {bit}"
        flip(victim, at, bit)
    assert named > places // 8
    assert said(copy) == []


def test_every_flipped_bit_of_an_archive_is_named(house: Path) -> None:
    """There every byte counts: of the files, and of the container between them."""
    with quick_folder() as folder:
        victim, random = folder / "a.zip", Random(8)
        shutil.copy(house / "a.zip", victim)
        size = victim.stat().st_size
        assert said(victim) == []
        with zipfile.ZipFile(victim) as zipped:
            heads = [i.header_offset + k for i in zipped.infolist() for k in (4, 10, 12)]
            directory = range(zipped.start_dir, size, 97)
        steps = [k * size // 80 + random.randrange(size // 80) for k in range(80)]
        for at in [*steps, *heads, *directory, size - 1]:
            bit = random.randrange(8)
            flip(victim, at, bit)
            assert said(victim), f"byte {at}, bit {bit}"
            flip(victim, at, bit)
        whole = victim.read_bytes()
        for length in (0, 3, 100, size // 2, size - 1):
            victim.write_bytes(whole[:length])
            assert said(victim), f"cut to {length} bytes"


def sql(path: Path, *statements: str) -> None:
    with closing(sqlite3.connect(path)) as db:
        for statement in statements:
            assert db.execute(statement).rowcount, statement
        db.commit()


def swap_chunks(folder: Path) -> None:
    """Put chunk 1 in the place of chunk 2 and the other way round, each with all its checks."""
    with closing(sqlite3.connect(folder / "tests" / "H1.sqlite")) as db:
        for a, b in ((1, -1), (2, 1), (-1, 2)):
            db.execute("UPDATE chunk SET number = ? WHERE number = ?", (b, a))
        db.commit()


def cut(path: Path) -> None:
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])


DAMAGES: dict[str, tuple[Callable[[Path], object], str, str]] = {
    "a removed chunk": (
        lambda j: sql(j / "tests" / "H1.sqlite", "DELETE FROM chunk WHERE number = 2"), "H1.sqlite",
        "H1@S-1"),
    "a chunk removed without a trace in the host file": (
        lambda j: (sql(j / "tests" / "H1.sqlite", "DELETE FROM chunk WHERE number = 2"),
                   sql(j / "journal.sqlite", "DELETE FROM chunk WHERE frame = 'H1' AND number = 2")),
        "journal.sqlite", ""),
    "exchanged chunks": (swap_chunks, "H1.sqlite", "H1@S-1"),
    "a cut file": (lambda j: cut(j / "tests" / "H1.sqlite"), "H1.sqlite", ""),
    "a missing file": (lambda j: (j / "tests" / "H1.sqlite").unlink(), "H1.sqlite", ""),
    "a gap in the host file": (
        lambda j: sql(j / "journal.sqlite", "DELETE FROM tail WHERE seq = (SELECT max(seq) - 1 FROM tail)"),
        "journal.sqlite", ""),
    "the file of another test": (
        lambda j: shutil.copy(j / "tests" / "H2.sqlite", j / "tests" / "H1.sqlite"), "H1.sqlite", ""),
    "a stray file": (
        lambda j: shutil.copy(j / "tests" / "H2.sqlite", j / "tests" / "H7.sqlite"), "H7.sqlite", ""),
    "a changed site": (
        lambda j: sql(j / "tests" / "H1.sqlite", "UPDATE about SET value = 'x' WHERE key = 'site'"),
        "H1.sqlite", ""),
    "a changed row": (
        lambda j: sql(j / "journal.sqlite", "UPDATE tail SET data = zeroblob(9) WHERE seq = "
                      "(SELECT max(seq) FROM tail WHERE frame = 'H1')"), "journal.sqlite", "H1@S-2"),
}  # fmt: skip


@pytest.mark.parametrize("how", DAMAGES)
def test_each_damage_is_named_with_file_test_and_what_is_left(
    copy: Path, how: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """A person must learn where, whose, which numbers, and what can still be had."""
    damage, file, test = DAMAGES[how]
    damage(copy)
    assert main(["verify", str(copy), "--json"]) == DAMAGED
    lines = [json.loads(line) for line in capsys.readouterr().out.splitlines()]
    faults = [f for f in lines if f["kind"] in ("damage", "gap")]
    assert any(f["file"] == file for f in faults), faults
    if test:
        mine = [f for f in faults if test in f["tests"]]
        assert mine
        for f in mine:
            assert f["first_seq"] <= f["last_seq"]
            assert f["readable"], "the rest of the frame"
            assert all(b < f["first_seq"] or a > f["last_seq"] for a, b in f["readable"]), f
    assert lines[-1] | {"says": ""} == {
        "kind": "summary", "sound": False, "faults": len(faults), "notes": len(lines) - 1 - len(faults) - sum(
            x["kind"] == "test" for x in lines), "says": "",
    }  # fmt: skip
    assert main(["verify", str(copy)]) == DAMAGED
    text = capsys.readouterr().out
    assert "still readable" in text
    assert f": {len(faults)} fault" in text


def test_a_sound_record_is_told_test_by_test(house: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Scans, chunks, from when to when, first and last hash: what was looked at, beside the verdict."""
    assert main(["verify", str(house / "j"), "--json"]) == OK
    lines = [json.loads(line) for line in capsys.readouterr().out.splitlines()]
    told = {f"{x['test']}@{x['specimen']}": x for x in lines if x["kind"] == "test"}
    assert {name: x["scans"] for name, x in told.items()} == {"H1@S-1": 200, "H1@S-2": 100, "H2@T-9": 100}
    first, second = told["H1@S-1"], told["H1@S-2"]
    assert (first["from"], first["to"]) == ("2026-01-01T00:00:00.0000Z", "2026-01-01T09:57:00.0000Z")
    assert second["from"] == "2026-01-01T10:00:00.0000Z"
    assert first["last_seq"] < second["first_seq"]
    with closing(sqlite3.connect(house / "j" / "journal.sqlite")) as db:
        chains = [
            c.hex() for (c,) in db.execute("SELECT chain FROM chunk WHERE frame = 'H1' ORDER BY number")
        ]
    assert (first["first_hash"], first["last_hash"]) == (chains[0], chains[first["chunks"] - 1])
    assert second["last_hash"] == chains[-1]
    assert main(["verify", str(house / "j")]) == OK
    out, err = capsys.readouterr()
    line = next(x for x in out.splitlines() if x.startswith("H1 S-1:"))
    assert "200 scans" in line
    assert f"last hash {first['last_hash'][:16]}: sound" in line
    assert "cannot show the work of someone who can write the whole record" in err


def test_sealed_files_are_checked_alone(house: Path, copy: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The host may be gone."""
    assert main(["verify", str(copy / "tests" / "H1.sqlite"), str(copy / "tests" / "H2.sqlite")]) == OK
    assert "H2 T-9" in capsys.readouterr().out
    sql(copy / "tests" / "H1.sqlite", "UPDATE chunk SET chain = zeroblob(32) WHERE number = 1")
    assert main(["verify", str(copy / "tests" / "H1.sqlite")]) == DAMAGED
    assert "does not follow" in capsys.readouterr().out


def test_nothing_is_written(copy: Path) -> None:
    """Whoever checks evidence must not touch it: no byte of a file, no file more but SQLite's empty ones."""
    before = {p: p.read_bytes() for p in copy.rglob("*") if p.is_file()}
    assert said(copy) == []
    after = {p: p.read_bytes() for p in copy.rglob("*") if p.is_file()}
    assert {p: b for p, b in after.items() if p in before} == before
    for path in after.keys() - before.keys():
        assert path.name.endswith("-shm") or (path.name.endswith("-wal") and after[path] == b"")


def test_a_running_daemon_is_no_damage(monkeypatch: pytest.MonkeyPatch) -> None:
    """It commits and seals between any two looks of the check."""
    monkeypatch.setattr("daq.store.chunks.CHUNK_SCANS", 40)
    with quick_folder() as folder, Journal.open(folder / "j", site="hall-a") as journal:
        journal.commit(Batch(facts=(rules(folder, "S-1", "H1"),)))
        stop = threading.Event()

        def work() -> None:
            k = 0
            while not stop.is_set():
                journal.commit(Batch(facts=(scans("H1", k, 20), scans("H2", k, 20), started(k))))
                journal.seal()
                k += 20

        thread = threading.Thread(target=work)
        thread.start()
        try:
            for _ in range(25):
                assert said(folder / "j") == []
        finally:
            stop.set()
            thread.join()
        assert journal.last_seq > 30


def test_an_acknowledged_fact_that_is_gone_with_the_write_ahead_file_is_named() -> None:
    """Without it the host file is sound and old; the mark of the last commit tells."""
    with quick_folder() as folder:
        with Journal.open(folder / "live", site="hall-a") as journal:
            journal.commit(Batch(facts=(rules(folder, "S-1", "H1"),)))
            journal.checkpoint()
            journal.commit(Batch(facts=(scans("H1", 0, 20), scans("H1", 20, 20))))
            (folder / "j").mkdir()
            for name in ("journal.sqlite", "journal.lock"):
                shutil.copy(folder / "live" / name, folder / "j" / name)
        (trouble,) = check(folder / "j").troubles
        assert (trouble.first, trouble.last) == (2, 3)
        assert "acknowledged" in trouble.wanted


def test_a_whole_record_made_anew_shows_only_against_a_noted_hash(
    house: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """What the chain cannot show is said, and what can be done about it works."""
    monkeypatch.setattr("daq.store.chunks.CHUNK_SCANS", 40)
    with closing(sqlite3.connect(house / "j" / "journal.sqlite")) as db:
        (name,) = db.execute("SELECT value FROM meta WHERE key = 'journal'").fetchone()
        (noted,) = db.execute("SELECT chain FROM chunk WHERE frame = 'H1' ORDER BY number DESC").fetchone()
    with quick_folder() as folder:
        Journal.open(folder / "j", site="hall-a").close()
        sql(folder / "j" / "journal.sqlite", f"UPDATE meta SET value = '{name}' WHERE key = 'journal'")
        (folder / "j" / "journal.lock").unlink()
        write(folder / "j", folder)
        args = ["verify", str(folder / "j"), "--noted", noted.hex()[:16]]
        assert main(args) == OK, "the same facts make the same hashes"
        shutil.rmtree(folder / "j")
        Journal.open(folder / "j", site="hall-a").close()
        sql(folder / "j" / "journal.sqlite", f"UPDATE meta SET value = '{name}' WHERE key = 'journal'")
        (folder / "j" / "journal.lock").unlink()

        def forge(fact: Fact) -> Fact:
            mine = isinstance(fact, ScansTaken) and (fact.frame, fact.utc_tick[0]) == (
                "H1",
                stamp(0).utc_tick,
            )
            return scans("H1", 0, 20, 5) if mine else fact

        write(folder / "j", folder, forge)
        assert main(["verify", str(folder / "j")]) == OK, "forged as a whole: the chain alone shows nothing"
        capsys.readouterr()
        assert main(args) == DAMAGED
        assert "no such hash now" in capsys.readouterr().out


def test_text_in_an_archive_that_is_not_the_records_is_named(house: Path) -> None:
    """New sums over changed files are easily made; the record still says otherwise."""
    for file, change in {
        "readings.csv.gz": lambda p: p.write_bytes((p.parent / "other.gz").read_bytes()),
        "manifest.json": lambda p: p.write_text(p.read_text().replace('"scans": 200', '"scans": 201')),
        "README.txt": lambda p: p.unlink(),
    }.items():
        with quick_folder() as folder:
            container.read_container(house / "a.zip", folder / "x")
            text = gzip.decompress((folder / "x" / "readings.csv.gz").read_bytes()).replace(
                b"980.0", b"981.0", 1
            )
            (folder / "x" / "other.gz").write_bytes(gzip.compress(text))
            change(folder / "x" / file)
            (folder / "x" / "other.gz").unlink()
            container.write_sums(folder / "x")
            container.write_container(folder / "x", folder / "a.zip")
            assert any(file in t for t in said(folder / "a.zip")), file


@pytest.mark.parametrize(
    ("place", "code", "words"),
    [
        ("nowhere", INPUT, "no such file"),
        ("j/journal.sqlite", INPUT, "wanted its folder"),
        ("empty", INPUT, "wanted a journal"),
        ("rubbish.sqlite", DAMAGED, "rubbish.sqlite"),
        ("rubbish.zip", DAMAGED, "rubbish.zip"),
    ],
)
def test_what_is_no_record_is_said_so(
    house: Path, place: str, code: int, words: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """A wrong path is a mistake; a file that should be one and is not, is damage."""
    (house / "empty").mkdir(exist_ok=True)
    (house / "rubbish.sqlite").write_bytes(b"rubbish" * 300)
    (house / "rubbish.zip").write_bytes(b"rubbish" * 300)
    assert main(["verify", str(house / place)]) == code
    out, err = capsys.readouterr()
    assert words in out + err
    assert "Traceback" not in err
