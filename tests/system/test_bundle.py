"""The archive of one test stands alone: same findings, equal bytes, and another host goes on from it."""

from __future__ import annotations

import gzip
import hashlib
import json
import sqlite3
import subprocess
import sys
import zipfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import jsonschema
import pytest
from record_cases import facts, lab_file, quick_folder, scans, stamp, write_journal

from daq import settings
from daq.adopt import AdoptError, finding_of
from daq.cli import main
from daq.codec import encode_state
from daq.engine import Engine
from daq.exits import DAMAGED, INPUT, OK, TROUBLE, USAGE
from daq.records import RulesAdopted
from daq.startup import first_facts, recover
from daq.store.journal import Journal

ROOT = Path(__file__).parents[2]


house_engine: dict[str, Engine] = {}
"""The engine of the house as it stood when its journal was written."""


@pytest.fixture(scope="module")
def house() -> Iterator[Path]:
    """A folder with the journal ``j`` (chunks of 40 scans) and nothing else that matters."""
    with quick_folder() as folder:
        with pytest.MonkeyPatch.context() as patch:
            patch.setattr("daq.store.chunks.CHUNK_SCANS", 40)
            house_engine["first"] = write_journal(folder / "j", folder)
        assert main(["replay", str(folder / "j"), "--findings", str(folder / "whole.jsonl")]) == OK
        yield folder


def bundle(house: Path, test: str, name: str) -> Path:
    path = house / name
    assert main(["export", str(house / "j"), "--bundle", str(path), "--test", test]) == OK
    return path


def lines_of(path: Path, prefix: str) -> list[str]:
    return [line for line in path.read_text().splitlines() if json.loads(line)["id"].startswith(prefix)]


@pytest.mark.parametrize("test", ["H1@S-1", "H1@S-2", "H2"])
def test_a_replay_of_the_archive_gives_the_findings_of_the_journal(
    house: Path, test: str, tmp_path: Path
) -> None:
    """Ended or running, the first or the second specimen of a frame: not a byte of a finding differs."""
    specimen = {"H1@S-1": "S-1", "H2": "T-9"}.get(test, "S-2")
    prefix = f"{test[:2]}|{specimen}|"
    path = bundle(house, test, f"replay-{test}.zip")
    assert main(["replay", str(path), "--findings", str(tmp_path / "alone.jsonl")]) == OK
    wanted = lines_of(house / "whole.jsonl", prefix)
    assert len(wanted) >= 5
    assert any(json.loads(line)["kind"] == "excursion" for line in wanted)
    assert (tmp_path / "alone.jsonl").read_text().splitlines() == wanted
    with zipfile.ZipFile(path) as container:
        live = container.read("findings.jsonl").decode().splitlines()
    assert live == [line for line in wanted if json.loads(line)["kind"] != "summary"]


def test_equal_content_gives_equal_bytes(house: Path, tmp_path: Path) -> None:
    """Two exports at two times can be compared by their checksums, and so can copies years apart."""
    first, second = bundle(house, "H1", "one.zip"), bundle(house, "H1", "two.zip")
    assert first.read_bytes() == second.read_bytes()
    other = bundle(house, "H1@S-1", "other.zip").read_bytes()
    assert other != first.read_bytes()
    assert bundle(house, "H1@1", "by-number.zip").read_bytes() == other
    assert bundle(house, "H1@2", "by-number.zip").read_bytes() == first.read_bytes()


def test_standard_tools_open_it(house: Path, tmp_path: Path) -> None:
    """In ten years there may be no such program: zip, sha256sum, SQLite and gzip must be enough."""
    path = bundle(house, "H1@S-1", "tools.zip")
    with zipfile.ZipFile(path) as container:
        assert container.testzip() is None
        container.extractall(tmp_path)
        assert container.namelist()[0] == "README.txt"
    for line in (tmp_path / "SHA256SUMS").read_text().splitlines():
        digest, name = line.split("  ")
        assert hashlib.sha256((tmp_path / name).read_bytes()).hexdigest() == digest
    text = gzip.decompress((tmp_path / "readings.csv.gz").read_bytes()).decode()
    rows = [r for r in text.splitlines() if not r.startswith("#")]
    assert rows[0] == "time,left,right,mid"
    assert len(rows) == 1 + 200
    want = scans("H1", 40, 20)
    assert rows[1 + 40].split(",")[1:] == ["", repr(float(want.values[0, 1])), repr(float(want.values[0, 2]))]
    with sqlite3.connect(tmp_path / "record" / "H1.sqlite") as db:
        assert db.execute("SELECT sum(scans) FROM chunk").fetchone()[0] >= 200
    db.close()
    manifest = json.loads((tmp_path / "manifest.json").read_text())
    assert [v["version"] for v in manifest["versions"]] == ["0.0.9"] or manifest["first_seq"] > 1
    assert [r["rules"]["specimen"]["id"] for r in manifest["rules"]] == ["S-1"]


def test_the_layout_in_the_readme_is_enough_to_read_the_record(house: Path, tmp_path: Path) -> None:
    """A reader written from that text alone finds the scans and every hash (written here, from the text)."""
    import struct
    import zlib

    path = bundle(house, "H1@S-1", "layout.zip")
    with zipfile.ZipFile(path) as container:
        container.extractall(tmp_path)
    db = sqlite3.connect(tmp_path / "record" / "H1.sqlite")
    about = dict(db.execute("SELECT key, value FROM about"))
    chain = (
        bytes.fromhex(about["before"])
        if "before" in about
        else f"{about['journal']}|{about['frame']}".encode()
    )
    numbers: list[float] = []
    for number, first, last, content, link, packed, data in db.execute(
        "SELECT number, first_seq, last_seq, content, chain, rows, data FROM chunk ORDER BY number"
    ):
        index = struct.unpack(f"<{len(zlib.decompress(packed)) // 8}q", zlib.decompress(packed))
        r = index[0]
        place = json.dumps([number, about["frame"], first, last], separators=(",", ":")).encode()
        chain = hashlib.sha256(chain + place + content).digest()
        assert chain == link
        at = 0
        for size in index[1 + r : 1 + 2 * r]:
            version, k, h = struct.unpack_from("<BBI", data, at)
            kind = data[at + 6 : at + 6 + k]
            head = json.loads(data[at + 6 + k : at + 6 + k + h])
            body = data[at + 6 + k + h : at + size]
            at += size
            assert version == 1
            if kind != b"ScansTaken" or head["n"] < 16:
                continue
            body, parts, pos = zlib.decompress(body), [], 0
            while pos < len(body):
                (length,) = struct.unpack_from("<I", body, pos)
                parts.append(body[pos + 4 : pos + 4 + length])
                pos += 4 + length
            column, scale, n = parts[2 + head["c"].index("mid")], head["s"][head["c"].index("mid")], head["n"]
            (holes,) = struct.unpack_from("<H", column)
            assert holes == 0
            value, code = struct.unpack_from("<qB", column, 2)
            width, planes = 2**code, column[11:]
            numbers.append(value / 10**scale)
            for i in range(n - 1):
                step = bytes(planes[p * (n - 1) + i] for p in range(width))
                value += int.from_bytes(step, "little", signed=True)
                numbers.append(value / 10**scale)
    db.close()
    assert numbers[:120] == [float(v) for m in range(0, 120, 20) for v in scans("H1", m, 20).values[:, 2]]


def test_the_manifest_is_as_its_schema_says(house: Path, tmp_path: Path) -> None:
    """Other programs read it."""
    schema = json.loads((ROOT / "daq" / "schemas" / "archive_manifest.json").read_text())
    jsonschema.Draft202012Validator.check_schema(schema)
    judge = jsonschema.Draft202012Validator(schema)
    for test in ("H1@S-1", "H1", "H2"):
        with zipfile.ZipFile(bundle(house, test, "schema.zip")) as container:
            manifest = json.loads(container.read("manifest.json"))
        judge.validate(manifest)
        assert manifest["running"] == (test != "H1@S-1")
        for key in manifest:
            wrong: dict[str, Any] = {k: v for k, v in manifest.items() if k != key}
            assert not judge.is_valid(wrong), key


def test_hashes_of_sealed_chunks_are_those_of_the_journal(
    house: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """What was noted while the test ran must be found in the archive."""
    path = bundle(house, "H1@S-2", "noted.zip")
    with sqlite3.connect(house / "j" / "journal.sqlite") as db:
        chains = [
            c.hex() for (c,) in db.execute("SELECT chain FROM chunk WHERE frame = 'H1' ORDER BY last_seq")
        ]
    db.close()
    assert len(chains) > 3
    capsys.readouterr()
    assert main(["verify", str(path), "--noted", chains[-1][:16]]) == OK
    assert main(["verify", str(path), "--noted", "0123456789abcdef"]) == DAMAGED
    assert "no such hash" in capsys.readouterr().out


@pytest.mark.parametrize(
    ("args", "code", "words"),
    [
        (["--bundle", "x.zip"], USAGE, "--test"),
        (["--test", "H1"], USAGE, "--bundle"),
        (["--bundle", "x.zip", "--test", "H9"], INPUT, "H1, H2"),
        (["--bundle", "x.zip", "--test", "H1@S-7"], INPUT, "H1@S-1, H1@S-2"),
        (["--bundle", "x.zip", "--test", "H1@3"], INPUT, "H1@S-1, H1@S-2"),
        (["--bundle", "x.zip", "--test", "H1/top"], INPUT, "none in that place"),
        (["--bundle", "JOURNAL/x.zip", "--test", "H1"], INPUT, "another file"),
    ],
)
def test_wrong_wishes_are_explained(
    house: Path, args: list[str], code: int, words: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """And nothing is written."""
    args = [a.replace("JOURNAL", str(house / "j")).replace("x.zip", str(house / "x.zip")) for a in args]
    args = [a.replace(f"{house / 'j'}/{house}", str(house / "j")) for a in args]
    assert main(["export", str(house / "j"), *args]) == code
    assert words in capsys.readouterr().err
    assert not (house / "x.zip").exists()


def test_an_archive_of_a_damaged_test_is_written_and_says_so(house: Path, tmp_path: Path) -> None:
    """The damage goes along, named; what is sound is kept, and a sum of the file hides nothing."""
    import shutil

    copy = tmp_path / "j"
    shutil.copytree(house / "j", copy)
    with sqlite3.connect(copy / "tests" / "H1.sqlite") as db:
        db.execute("UPDATE chunk SET data = zeroblob(length(data)) WHERE number = 2")
    db.close()
    path = tmp_path / "damaged.zip"
    assert main(["export", str(copy), "--bundle", str(path), "--test", "H1@S-1"]) == TROUBLE
    assert main(["verify", str(path)]) == DAMAGED


def test_another_host_goes_on_with_the_test(house: Path, tmp_path: Path) -> None:
    """Its state after the takeover and after the next scans is that of the first host, byte by byte."""
    path = bundle(house, "H1@S-2", "move.zip")
    lab = lab_file(tmp_path, "new", "S-2")
    assert main(["adopt", str(path), str(lab)]) == OK
    with Journal.open(tmp_path / "new", site="hall-a") as journal:
        live = [f for _, f in journal.findings(test="H1")]
    first = house_engine["first"]
    with Journal.open(tmp_path / "new", site="hall-a") as journal:
        second, ended = recover(journal, lambda text: None)
        assert [f for _, f in journal.findings(test="H1")] == live, "every finding came along, and no more"
        assert journal.outbox() == [], "nothing is published again"
        assert ended is not None
        assert encode_state(second.tests["H1"]) == encode_state(first.tests["H1"])
        for engine in (first, second):
            engine.take(scans("H1", 320, 20, 200))
        assert encode_state(second.tests["H1"]) == encode_state(first.tests["H1"])

        class Later:
            speed = 1.0

            def stamp(self) -> Any:
                return stamp(700)

        lab_now = settings.load(lab)
        new = [f for f in first_facts(lab_now, second, Later(), ended) if isinstance(f, RulesAdopted)]  # type: ignore[arg-type]
        assert [f.test for f in new] == ["H2"], "the same rules are not adopted anew"
    assert main(["verify", str(tmp_path / "new")]) == OK


def test_a_test_is_not_mixed_into_a_record_that_is_there(
    house: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Nor taken over for another specimen; both are refused in words."""
    path = bundle(house, "H1@S-2", "refused.zip")
    assert main(["adopt", str(path), str(lab_file(house, "j", "S-2"))]) == INPUT
    assert "wanted a new one" in capsys.readouterr().err
    assert main(["adopt", str(path), str(lab_file(tmp_path, "new", "S-1"))]) == INPUT
    assert "wanted specimen S-2" in capsys.readouterr().err
    with pytest.raises(AdoptError, match="wanted a finding"):
        finding_of('{"id": 1}')


def test_a_test_that_still_runs_is_archived_while_the_journal_is_held(tmp_path: Path) -> None:
    """Nobody stops a daemon for an archive."""
    with Journal.open(tmp_path / "j", site="hall-a") as journal:
        from daq.store.rows import Batch

        engine = Engine()
        for fact, _ in zip(facts(tmp_path), range(12), strict=False):
            journal.commit(Batch(facts=(fact,), findings=tuple(engine.take(fact))))
        command = [sys.executable, "-m", "daq.cli", "export", tmp_path / "j"]
        command += ["--bundle", tmp_path / "now.zip", "--test", "H1"]
        done = subprocess.run(command, capture_output=True, text=True, check=False)
        assert done.returncode == OK, done.stderr
        journal.commit(Batch(facts=(scans("H1", 200, 20),)))
    assert main(["verify", str(tmp_path / "now.zip")]) == OK
