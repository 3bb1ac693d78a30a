"""The spool folder: entries come whole or not at all, and once."""

from __future__ import annotations

import os
import time
from pathlib import Path

import pytest

from daq.entries import SPOOL, Entry, EntryError, forget, read_entries, write_entry


@pytest.fixture
def journal(tmp_path: Path) -> Path:
    (tmp_path / SPOOL).mkdir()
    return tmp_path


def test_entries_come_out_in_the_order_they_were_made(journal: Path) -> None:
    """An acknowledgement after 'loaded' must not overtake it."""
    write_entry(journal, "H1", "loaded", "mk", {"mass_kg": 41.5})
    write_entry(journal, "H1", "acknowledge", "j.d.", note="seen")
    first, second = read_entries(journal)
    assert isinstance(first, Entry)
    assert isinstance(second, Entry)
    assert (first.entry, first.values, second.entry, second.note) == (
        "loaded",
        {"mass_kg": 41.5},
        "acknowledge",
        "seen",
    )
    forget(journal, first.file)
    assert [e.entry for e in read_entries(journal) if isinstance(e, Entry)] == ["acknowledge"]


def test_a_file_that_is_still_being_written_is_not_read(journal: Path) -> None:
    """Only the rename makes an entry; a half-written file has another name."""
    (journal / SPOOL / ".00000000000000000001-7.json.part").write_text('{"frame": "H')
    assert list(read_entries(journal)) == []


@pytest.mark.parametrize(
    "text",
    [
        "",
        "[1]",
        '{"frame": "H1"}',
        '{"frame":"H1","entry":"explode","initials":"mk"}',
        '{"frame":"H1","entry":"note","initials":" "}',
        '{"frame":7,"entry":"note","initials":"mk"}',
        '{"frame":"H1","entry":[],"initials":"mk"}',
        '{"frame":"H1","entry":"note","initials":"mk","note":3}',
        '{"frame":"H1","entry":"note","initials":"mk","note":"\\u001b[2J"}',
        '{"frame":"H1","entry":"note","initials":"mk","note":"\\ud800"}',
        '{"frame":"H1","entry":"note","initials":"mk","values":[1]}',
        '{"frame":"H1","entry":"loaded","initials":"mk","values":{"minutes_ago":NaN}}',
        '{"frame":"H1","entry":"loaded","initials":"mk","values":{"minutes_ago":1e999}}',
        '{"frame":"H1","entry":"loaded","initials":"mk","values":{"mass_kg":[[1e999]]}}',
        '{"frame":"H1","entry":"shelve","initials":"mk","values":{"alarm":"rupture","hours":-3}}',
        '{"frame":"H9","entry":"note","initials":"mk"}',
        '{"frame":"H2","entry":"note","initials":"mk","values":{"position":"middle"}}',
        '{"frame":"","entry":"note","initials":"mk","values":{"position":"upper"}}',
        "[" * 60_000,
        "x" * 70_000,
    ],
)
def test_a_bad_file_is_set_aside_and_named(journal: Path, text: str) -> None:
    """One bad file may neither stop the daemon nor be read again and again, nor be deleted."""
    (journal / SPOOL / "00000000000000000001-7.json").write_text(text)
    (refused,) = read_entries(journal, ("H1", "H2/upper", "H2/lower"))
    assert isinstance(refused, EntryError)
    assert "got" in str(refused)
    assert "wanted" in str(refused)
    assert "refused-00000000000000000001-7.json" in str(refused)
    assert (journal / SPOOL / "refused-00000000000000000001-7.json").read_text() == text
    assert list(read_entries(journal)) == []


def test_what_is_no_file_neither_blocks_nor_feeds_for_ever(journal: Path) -> None:
    """A pipe under a good name once would have hung the daemon."""
    names = [f"{i:020d}-7.json" for i in range(3)]
    os.mkfifo(journal / SPOOL / names[0])
    (journal / SPOOL / names[1]).symlink_to("/dev/zero")
    (journal / SPOOL / names[2]).mkdir()
    assert [type(e) for e in read_entries(journal)] == [EntryError] * 3
    assert list(read_entries(journal)) == []


def test_a_spool_that_cannot_be_read_is_named(tmp_path: Path) -> None:
    """Silence would look like a spool without entries."""
    with pytest.raises(EntryError, match="wanted a folder"):
        list(read_entries(tmp_path))


def test_an_entry_knows_how_long_it_waited(journal: Path) -> None:
    """What was told while no daemon ran must not be dated by the start of the next one."""
    (journal / SPOOL / f"{time.time_ns() - 90 * 10**9:020d}-7.json").write_text(
        '{"frame":"H1","entry":"loaded","initials":"mk"}'
    )
    (entry,) = read_entries(journal)
    assert isinstance(entry, Entry)
    assert 90.0 <= entry.age_s < 150.0


@pytest.mark.parametrize(("entry", "initials"), [("explode", "mk"), ("loaded", ""), ("loaded", "x" * 40)])
def test_a_wrong_entry_is_refused_before_it_is_written(journal: Path, entry: str, initials: str) -> None:
    """The person at the keyboard can mend it; the daemon at night cannot."""
    with pytest.raises(EntryError, match="got"):
        write_entry(journal, "H1", entry, initials)
    assert list((journal / SPOOL).iterdir()) == []


def test_a_folder_without_a_daemon_is_named(tmp_path: Path) -> None:
    """An entry into nowhere would look accepted."""
    with pytest.raises(EntryError, match="no such folder"):
        write_entry(tmp_path, "H1", "loaded", "mk")
