"""``upturn verify``: what was checked, test by test, and every fault, as text or as JSON lines."""

from __future__ import annotations

import sys
from argparse import Namespace
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

from daq.bundle import is_bundle, sha256_of, verify_bundle
from daq.codec import canonical_json
from daq.exits import DAMAGED, OK
from daq.lines import iso_utc
from daq.records import UpturnError
from daq.store.errors import JournalError
from daq.store.schema import HOST_FILE
from daq.store.survey import Ranges, Survey, TestRun
from daq.store.verify import DAMAGE, GAP, NOTE, Trouble, verify, verify_sealed

SHOWN: Final = 16
"""Digits of a hash that a line for people shows."""
NOTED_LEAST: Final = 8
SAYING: Final = (
    "The chain shows any change after which not every later hash was made anew. It cannot show the work of "
    "someone who can write the whole record and makes all of them anew: note the last hash of each test "
    "elsewhere, and compare it later with --noted HASH."
)


class CheckError(UpturnError):
    """What is to be checked is not there."""


@dataclass(frozen=True, slots=True)
class Checked:
    """One journal or file after its walk."""

    place: Path
    survey: Survey
    troubles: list[Trouble]
    sha256: str | None = None


def command(args: Namespace) -> int:
    """Check journals, sealed files and archives; say what was found; return the exit code."""
    noted = [text.lower() for text in args.noted or ()]
    for text in noted:
        if len(text) < NOTED_LEAST or set(text) - set("0123456789abcdef"):
            raise CheckError(
                f"--noted: got {text!r}, wanted a hash as verify shows it (from {NOTED_LEAST} digits)"
            )
    done = [check(path) for path in args.places]
    chains = [p.chain.hex() for c in done for p in c.survey.parts if p.chain and p.sound]
    missing = [text for text in noted if not any(c.startswith(text) for c in chains)]
    lines = as_json(done, missing) if args.json else as_text(done, missing)
    for line in lines:
        print(line)
    bad = bool(missing) or any(t.kind != NOTE for c in done for t in c.troubles)
    if not args.json:
        print(f"upturn verify: {SAYING}", file=sys.stderr)
    return DAMAGED if bad else OK


def check(place: Path) -> Checked:
    """Walk through a journal folder (or the lab file that names it), a sealed file or an archive.

    Raises:
        CheckError: there is no such thing.
        JournalError: no journal is there, or one of a later version of this program.
    """
    survey = Survey()
    if place.suffix in (".yaml", ".yml") and place.is_file():
        from daq import settings

        place = settings.load(place).journal
    if place.name == HOST_FILE:
        raise CheckError(f"{place}: got one file of a journal, wanted its folder: {place.parent}")
    if place.is_dir():
        troubles = verify(place, survey)
    elif not place.exists():
        raise CheckError(
            f"{place}: got no such file or folder, wanted a journal, a sealed file or an archive"
        )
    else:
        troubles = verify_bundle(place, survey) if is_bundle(place) else verify_sealed(place, survey)
    return Checked(place, survey, list(troubles), sha256_of(place) if is_bundle(place) else None)


# --- what is said ---------------------------------------------------------------------------


def tests(checked: Checked) -> Iterator[dict[str, Any]]:
    """Yield what was checked of each test; of a frame whose rules are not there, of the frame."""
    survey = checked.survey
    runs = survey.tests()
    bare = sorted({p.frame for p in survey.parts} - {r.frame for r in runs} - {""})
    for run in [*runs, *(TestRun(frame, frame, "", 0, None) for frame in bare)]:
        blocks, parts = survey.of(run)
        chunks = [p for p in parts if p.file]
        hashes = [p.chain.hex() for p in chunks if p.chain]
        ticks = [(b.from_tick, b.to_tick) for b in blocks]
        seqs = [s for b in blocks for s in (b.first, b.last)] + [p.first for p in parts if not p.file]
        bad = [t for t in checked.troubles if t.kind != NOTE and _concerns(t, run)]
        yield {
            "kind": "test",
            "place": str(checked.place),
            "test": run.test,
            "specimen": run.specimen,
            "scans": sum(b.scans for b in blocks),
            "chunks": len(chunks),
            "rows": len(parts) - len(chunks),
            "files": sorted({p.file for p in chunks}),
            "first_seq": max(run.first, min(seqs, default=run.first)),
            "last_seq": max(seqs, default=None),
            "from": iso_utc(min(t[0] for t in ticks)) if ticks else None,
            "to": iso_utc(max(t[1] for t in ticks)) if ticks else None,
            "first_hash": hashes[0] if hashes else None,
            "last_hash": hashes[-1] if hashes else None,
            "sha256": checked.sha256,
            "faults": len(bad),
        }


def faults(checked: Checked) -> Iterator[dict[str, Any]]:
    """Yield every fault: where it is, what it concerns, what is wrong, and what can still be read."""
    runs = checked.survey.tests()
    for t in checked.troubles:
        concerned = [r for r in runs if t.frame and t.first is not None and _concerns(t, r)]
        yield {
            "kind": t.kind,
            "file": t.file or str(checked.place),
            "place": t.place,
            "frame": t.frame,
            "tests": [f"{r.test}@{r.specimen}" for r in concerned],
            "first_seq": t.first,
            "last_seq": t.last,
            "got": t.got,
            "wanted": t.wanted,
            "readable": [list(r) for r in _readable(checked, t)],
        }


def _concerns(trouble: Trouble, run: TestRun) -> bool:
    if trouble.frame is not None and trouble.frame != run.frame:
        return False
    if trouble.first is None or trouble.last is None:
        return trouble.frame is not None
    return trouble.last >= run.first and (run.last is None or trouble.first <= run.last)


def _readable(checked: Checked, trouble: Trouble) -> Ranges:
    if trouble.frame is not None:
        return checked.survey.readable(trouble.frame)
    frames = {p.frame for p in checked.survey.parts}
    return sorted(r for frame in frames for r in checked.survey.readable(frame))


def as_json(done: list[Checked], missing: list[str]) -> Iterator[str]:
    """Yield one JSON object a line: tests, faults, and a last line with the sums."""
    bad = notes = 0
    for checked in done:
        for line in tests(checked):
            yield canonical_json(line)
        for line in faults(checked):
            bad += line["kind"] != NOTE
            notes += line["kind"] == NOTE
            yield canonical_json(line)
    for text in missing:
        bad += 1
        yield canonical_json({"kind": "noted", "hash": text, "got": "no such hash"})
    sound = not bad
    yield canonical_json({"kind": "summary", "sound": sound, "faults": bad, "notes": notes, "says": SAYING})


def as_text(done: list[Checked], missing: list[str]) -> Iterator[str]:
    """Yield lines for people."""
    for checked in done:
        for t in tests(checked):
            yield _test_line(t)
        for f in faults(checked):
            yield _fault_line(f)
        bad = sum(t.kind != NOTE for t in checked.troubles)
        files = _many(len(checked.survey.files), "file")
        sums = f"; SHA-256 of the archive {checked.sha256}" if checked.sha256 else ""
        yield f"{checked.place}: {files} read to the end: {_many(bad, 'fault') if bad else 'sound'}{sums}"
    for text in missing:
        yield f"noted hash {text}: there is no such hash now, wanted one that begins so"


def _many(n: int, what: str) -> str:
    return f"{n} {what}" if n == 1 else f"{n} {what}s"


def _test_line(t: dict[str, Any]) -> str:
    name = f"{t['test']} {t['specimen']}".strip()
    span = f"{t['from'][:19]}Z to {t['to'][:19]}Z" if t["from"] else "no scans"
    rows = f" and {_many(t['rows'], 'row')} not sealed yet" if t["rows"] else ""
    held = f"{_many(t['scans'], 'scan')}, {_many(t['chunks'], 'chunk')}{rows}"
    hashes = "no hash yet"
    if t["last_hash"]:
        hashes = f"first hash {t['first_hash'][:SHOWN]}, last hash {t['last_hash'][:SHOWN]}"
    judged = "sound" if not t["faults"] else f"FAULTS: {t['faults']}"
    return f"{name}: {held}, {span}, {hashes}: {judged}"


def _fault_line(f: dict[str, Any]) -> str:
    what = ""
    if f["tests"]:
        what = f" test {', '.join(f['tests'])},"
    elif f["frame"] is not None:
        what = f" frame {f['frame'] or '(host)'},"
    numbers = "" if f["first_seq"] is None else f" facts {f['first_seq']}-{f['last_seq']}:"
    line = f"{f['kind']}: {f['file']}:{what}{numbers} {f['place']}: got {f['got']}, wanted {f['wanted']}"
    if f["kind"] == NOTE:
        return line
    whose = f" of {f['frame'] or 'the host'}" if f["frame"] is not None else ""
    shown = [f"{a}-{b}" for a, b in f["readable"]]
    left = ", ".join(shown[:6]) + (f" and {len(shown) - 6} ranges more" if len(shown) > 6 else "")
    return f"{line}; still readable{whose}: {'facts ' + left if left else 'nothing'}"


__all__ = ["DAMAGE", "GAP", "CheckError", "JournalError", "check", "command"]
