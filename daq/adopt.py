"""Another host goes on with a test: the facts of its archive become the beginning of a new journal.

The facts keep their stamps (the boot clock of the former host bridges to this one's by UTC, as over any
reboot), and the findings that were concluded live are kept as they are; nothing is published again. The
daemon's next start rebuilds the test from them and finds the time in between as an outage.

Only a journal without facts can take a test over. Facts of another installation (its starts, its clock
steps, its boot clock) among those of running tests here would be taken for this one's.
"""

from __future__ import annotations

import json
from collections.abc import Callable
from typing import Any

from daq.bundle import FINDINGS, Archive
from daq.core.rules import rules_to_json
from daq.instants import Instants
from daq.joining import joined
from daq.lines import iso_utc, json_line
from daq.records import Finding, RulesAdopted, UpturnError
from daq.settings import Lab
from daq.store.journal import Journal
from daq.store.rows import Batch, encoded


class AdoptError(UpturnError):
    """The test cannot be taken over here; the message says what stands in the way."""


def adopt(archive: Archive, lab: Lab, say: Callable[[str], None]) -> tuple[int, int]:
    """Begin the journal of ``lab`` with the test in ``archive``; return the number of facts and findings.

    All of it goes in one transaction: after a kill the journal is empty or has everything.

    Raises:
        AdoptError: the journal has facts already, or the lab file has no such test.
        JournalError: the archive or the journal is not in order.
    """
    rules = [r for f in lab.frames for r in f.tests if r.test == archive.test]
    if not rules or rules[0].specimen.id != archive.specimen:
        got = f"specimen {rules[0].specimen.id}" if rules else "no such place"
        raise AdoptError(f"{archive.test}: got {got} in the lab file, wanted specimen {archive.specimen}")
    facts = list(joined(fact for _, fact in archive.facts()))
    theirs = [f.rules for f in facts if isinstance(f, RulesAdopted)]
    lines = (archive.record.parent / FINDINGS).read_text(encoding="utf-8").splitlines()
    findings = tuple(finding_of(line) for line in lines)
    with Journal.open(lab.journal, site=lab.site) as journal:
        for notice in journal.notices:
            say(notice)
        if journal.last_seq:
            raise AdoptError(
                f"{lab.journal}: got a journal with {journal.last_seq} facts, wanted a new one: "
                "give the lab file another journal folder"
            )
        journal.commit(Batch(facts=tuple(encoded(f) for f in facts), findings=findings))
    if theirs and theirs[-1] != rules_to_json(rules[0]):
        say(f"{archive.test}: the lab file's rules differ from those last in force; they hold from now on")
    return len(facts), len(findings)


def finding_of(line: str) -> Finding:
    """Return the finding that a line of :func:`daq.lines.json_line` tells.

    Raises:
        AdoptError: it is none, or would not be told by the same line.
    """
    try:
        told: dict[str, Any] = json.loads(line)
        if told.get("can_wait_until") is not None:
            told["can_wait_until"] = _tick(told["can_wait_until"])
        at = _tick(told.pop("at"))
        finding = Finding(told.pop("id"), at, told.pop("test_h"), told.pop("frame"), told.pop("kind"), told)
        if json_line(finding, iso_utc) == line:
            return finding
    except (ValueError, KeyError, TypeError, AttributeError) as error:
        raise AdoptError(f"{FINDINGS}: got {line[:80]!r} ({error}), wanted a finding") from error
    raise AdoptError(f"{FINDINGS}: got {line[:80]!r}, wanted a finding as export writes it")


def _tick(text: str) -> int:
    return int(Instants().ticks([text])[0])
