"""Keys: from the bytes of a terminal to what the view does, without a terminal."""

from __future__ import annotations

from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st
from test_view_samples import NOW, rows, shot, tertiary_alarm

from daq.view import keys
from daq.view.commands import Order, Page, ViewState, press
from daq.view.keys import KeyCodec
from daq.view.model import AlarmRow, Place

STREAM = b"jk\x1b[A\x1b[B\x1bOA\x1b[5~\x1b[6~\x1b[H\x1b[1;5Fq\r\x7f\t?\xc3\xa4\x1b[Z\x1b[200~"
KEYS = [
    "j", "k", keys.UP, keys.DOWN, keys.UP, keys.PAGE_UP, keys.PAGE_DOWN, keys.HOME, keys.OTHER, "q",
    keys.ENTER, keys.BACKSPACE, keys.TAB, "?", "ä", keys.TAB, keys.OTHER,
]  # fmt: skip


@pytest.mark.parametrize("cut", range(len(STREAM) + 1))
def test_keys_do_not_depend_on_where_the_stream_was_cut(cut: int) -> None:
    """A slow line may split a key's sequence anywhere."""
    codec = KeyCodec()
    assert codec.feed(STREAM[:cut]) + codec.feed(STREAM[cut:]) == KEYS
    assert codec.settle() == []


def test_an_escape_that_nothing_follows_is_the_escape_key() -> None:
    """It is also the first byte of an arrow, so it counts only once nothing followed for a while."""
    codec = KeyCodec()
    assert codec.feed(b"\x1b") == []
    assert codec.waiting
    assert codec.settle() == [keys.ESCAPE]
    assert not codec.waiting
    assert codec.feed(b"\x1bj") == [keys.ESCAPE, "j"]


@given(st.lists(st.binary(max_size=20), max_size=8))
def test_garbage_makes_keys_and_no_errors(slices: list[bytes]) -> None:
    """A terminal may answer anything, also what nobody asked."""
    codec = KeyCodec()
    pressed = [key for s in slices for key in codec.feed(s)] + codec.settle()
    assert all(isinstance(key, str) and key for key in pressed)
    assert len(pressed) <= sum(map(len, slices)) + 1


# --- what they do ---------------------------------------------------------------------------


def play(state: ViewState, typed: list[str], among: tuple[Place, ...]) -> ViewState:
    """Press keys one after the other; an order stays on the state that made it."""
    for key in typed:
        state = press(state, key, among)
    return state


def test_the_choice_follows_the_most_urgent_row_until_a_person_chooses() -> None:
    """A view left open shows what presses now, not what pressed an hour ago."""
    among = rows(shot(4))
    assert [p.name for p in among] == ["H3", "H7", "K2", "K12/1"]
    assert ViewState().chosen is None
    assert play(ViewState(), ["j"], among).chosen == "H7"
    assert play(ViewState(), ["j", "j", keys.UP], among).chosen == "H7"
    assert play(ViewState(), [keys.PAGE_DOWN, "j"], among).chosen == "K12/1"
    assert play(ViewState(), ["G", "g", "k"], among).chosen == "H3"


def test_a_chosen_row_stays_chosen_when_the_order_changes() -> None:
    """A person acts on the test under the mark, wherever it has moved."""
    state = play(ViewState(), ["j"], rows(shot(4)))
    later = shot(4)
    later = replace(
        later, tests=(replace(later.tests[0], alarms=(), can_wait_until_tick=None), *later.tests[1:])
    )
    opened = press(state, keys.ENTER, rows(later))
    assert (opened.page, opened.chosen) == (Page.DETAIL, "H7")


def test_pages_open_and_close() -> None:
    """Enter and Esc lead in and out; any key leaves the help for where one came from."""
    among = rows(shot(4))
    inside = play(ViewState(), [keys.ENTER], among)
    assert (inside.page, inside.chosen) == (Page.DETAIL, "H3")
    assert play(inside, ["j"], among).chosen == "H7"
    assert play(inside, ["?"], among).page is Page.HELP
    assert play(inside, ["?", "x"], among).page is Page.DETAIL
    assert play(inside, [keys.ESCAPE], among).page is Page.LIST
    assert play(inside, ["q"], among).quit
    assert play(ViewState(), ["u"], among).utc


def test_n_goes_from_one_unacknowledged_alarm_to_the_next() -> None:
    """Among sixty-four frames they are not looked for by eye."""
    among = rows(shot(64))
    state = play(ViewState(chosen="K2"), ["n"], among)
    assert state.chosen == "H3"
    assert play(state, ["n"], among).chosen == "H7"
    assert play(state, ["n", "n"], among).chosen == "H3"
    quiet = tuple(p for p in among if not p.alarms)
    assert "no alarm" in play(ViewState(), ["n"], quiet).notice


def test_an_acknowledgement_names_the_alarm_and_who() -> None:
    """It goes into the record, so it must say what was seen by whom, and nothing more."""
    among = rows(shot(4))
    state = play(ViewState(chosen="H7"), ["a", "M", keys.ESCAPE], among)
    assert state.order is None
    assert state.prompt is None
    state = play(ViewState(chosen="H7"), ["a", "X", keys.BACKSPACE, "M", " ", "K", keys.ENTER], among)
    assert state.order == Order("H7", "acknowledge", "MK", ({"alarm": "tertiary_detected", "subject": ""},))
    assert press(state, "j", among).order is None


@pytest.mark.parametrize("initials", ["", "--", "."])
def test_nobody_is_not_taken_for_an_answer(initials: str) -> None:
    """An acknowledgement without a name is worth nothing to the next shift."""
    state = play(ViewState(chosen="H7"), ["a", *initials, keys.ENTER], rows(shot(4)))
    assert state.order is None
    assert state.prompt is not None
    assert "who" in state.prompt.complaint


def test_several_alarms_are_acknowledged_one_by_one_or_all_together() -> None:
    """All means those that were on the screen when the question was asked."""
    alarms = (tertiary_alarm(), AlarmRow("gradient", "top", "returned_unacknowledged", "low", since_tick=NOW))
    s = shot(4)
    s = replace(s, tests=(replace(s.tests[2], alarms=alarms),))
    among = rows(s)
    one = {"alarm": "tertiary_detected", "subject": "", "position": "1"}
    two = {"alarm": "gradient", "subject": "top", "position": "1"}
    assert play(ViewState(), ["a", "M", keys.ENTER], among).order == Order("K12", "acknowledge", "M", (one,))
    typed = ["a", keys.TAB, "M", keys.ENTER]
    assert play(ViewState(), typed, among).order == Order("K12", "acknowledge", "M", (two,))
    opened = play(ViewState(), ["a", keys.UP], among)
    assert play(opened, ["M", keys.ENTER], ()).order == Order("K12", "acknowledge", "M", (one, two))


def test_shelving_asks_for_hours_and_initials() -> None:
    """A shelf without an end would hide an alarm for ever."""
    among = rows(shot(4))
    state = play(ViewState(chosen="H7"), ["s", *"4.5", "x", keys.ENTER, *"MK", keys.ENTER], among)
    values = {"alarm": "tertiary_detected", "subject": "", "hours": 4.5}
    assert state.order == Order("H7", "shelve", "MK", (values,))
    for hours in ("", "0", "0.0", "73", "."):
        refused = play(ViewState(chosen="H7"), ["s", *hours, keys.ENTER], among)
        assert refused.prompt is not None
        assert "hours" in refused.prompt.complaint


def test_the_host_has_alarms_too() -> None:
    """A full disk concerns no frame, and is acknowledged all the same."""
    host = AlarmRow("disk_full", "", "unacknowledged", "high", "no room left", NOW)
    among = rows(replace(shot(4), host_alarms=(host,)))
    assert among[0].name == ""
    state = play(ViewState(), ["a", *"MK", keys.ENTER], among)
    assert state.order == Order("", "acknowledge", "MK", ({"alarm": "disk_full", "subject": ""},))


def test_without_an_alarm_there_is_nothing_to_acknowledge() -> None:
    """The view says so instead of asking for initials."""
    state = play(ViewState(chosen="K2"), ["a"], rows(shot(4)))
    assert state.prompt is None
    assert state.notice == "K2 has no unacknowledged alarm"
    assert play(ViewState(), ["j", "a", keys.ENTER, "n"], ()) == ViewState()
