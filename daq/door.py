"""The daemon's side of the spool: files become facts, once, and what goes wrong is said once."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from pathlib import Path
from typing import Final

from daq import entries
from daq.clock import Clock
from daq.core.entered import MINUTES_MOST
from daq.entries import Entry, EntryError
from daq.records import ConditionChanged, EntryMade, Fact

LATE_S: Final = 5.0
"""An entry that lay longer than this [real s] waited for a daemon: its time is not that of being taken."""


class Door:
    """Owned by the writer's thread. ``taken`` says whether a file's entry is in the record already."""

    def __init__(self, journal: Path, clock: Clock, taken: Callable[[str], bool]) -> None:
        self._journal = journal
        self._clock = clock
        self._taken = taken
        self._trouble = ""

    def look(self, tests: Sequence[str]) -> tuple[list[Fact], list[str]]:
        """Return the facts that lie in the spool, and the names of the files they came in.

        A file is to be forgotten when its fact is committed. Troubles are facts as well.
        """
        facts: list[Fact] = []
        files: list[str] = []
        try:
            for entry in entries.read_entries(self._journal, tests):
                if isinstance(entry, EntryError):
                    facts.append(self._refused(str(entry)))
                elif self._taken(entry.file):
                    entries.forget(self._journal, entry.file)
                else:
                    files.append(entry.file)
                    facts.append(self._made(entry))
        except EntryError as error:
            facts += self._troubled(str(error))
        else:
            self._trouble = ""
        return facts, files

    def forget(self, files: Iterable[str]) -> list[Fact]:
        """Remove files whose facts are committed; return what there is to say about it."""
        said: list[Fact] = []
        for file in files:
            try:
                entries.forget(self._journal, file)
            except EntryError as error:
                said += self._troubled(str(error))
        return said

    def _made(self, entry: Entry) -> EntryMade:
        values = dict(entry.values)
        if entry.age_s > LATE_S:
            waited_s = entry.age_s * self._clock.speed
            values["waited_s"] = round(waited_s, 1)
            if entry.entry == "loaded":
                ago = float(values.get("minutes_ago", 0.0)) + waited_s / 60.0
                values["minutes_ago"] = min(ago, MINUTES_MOST)
        return EntryMade(self._clock.stamp(), entry.frame, entry.entry, entry.initials, values, entry.note)

    def _refused(self, message: str) -> Fact:
        return ConditionChanged(self._clock.stamp(), "", "spool", "entry_refused", True, message)

    def _troubled(self, message: str) -> list[Fact]:
        """The same trouble comes with every look, four times a second: it is said once."""
        if message == self._trouble:
            return []
        self._trouble = message
        return [self._refused(message)]
