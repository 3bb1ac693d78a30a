"""The order of questions on a bus with dead units and with too little time."""

from __future__ import annotations

from itertools import pairwise

from drivers.base import GARBLED, MISSING
from drivers.conversation import NoAnswer
from drivers.rota import REST_MOST, Rota

SILENT = NoAnswer(MISSING, "silent")
NOT_ASKED = NoAnswer(MISSING, "no time", asked=False)


def test_a_silent_question_comes_last_and_more_and_more_rarely() -> None:
    """It costs a time-out and a new start each time."""
    rota = Rota(3)
    asked: list[int] = []
    for poll in range(60):
        turn = rota.turn()
        assert [i for i in turn if i != 0] == [1, 2]
        if 0 in turn:
            asked.append(poll)
            assert poll == 0 or turn == [1, 2, 0]
        for i in turn:
            rota.note(i, SILENT if i == 0 else "fine")
    assert asked[:5] == [0, 1, 3, 7, 15]
    assert {b - a for a, b in pairwise(asked[4:])} == {REST_MOST}


def test_an_answer_brings_a_question_back_at_once() -> None:
    """A unit that was switched on again is a full member."""
    rota = Rota(2)
    for _ in range(20):
        for i in rota.turn():
            rota.note(i, SILENT if i == 0 else "fine")
    while 0 not in rota.turn():
        pass
    rota.note(0, "fine")
    assert rota.turn() == [0, 1]


def test_garbage_is_no_silence_and_a_single_question_never_rests() -> None:
    """Garbled answers cost no time-out; the only question is the link itself."""
    rota = Rota(2)
    for _ in range(5):
        assert rota.turn() == [0, 1]
        rota.note(0, NoAnswer(GARBLED, "noise"))
    rota = Rota(1)
    for _ in range(5):
        assert rota.turn() == [0]
        rota.note(0, SILENT)


def test_questions_left_out_come_first_the_next_time() -> None:
    """A poll that is too short for all takes turns instead of starving the last."""
    rota = Rota(3)
    seen = set()
    for _ in range(3):
        turn = rota.turn()
        seen.add(turn[0])
        rota.note(turn[0], "fine")
        for i in turn[1:]:
            rota.note(i, NOT_ASKED)
    assert seen == {0, 1, 2} or len(seen) >= 2
    assert rota.turn()[0] != turn[0]
