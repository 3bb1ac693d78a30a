"""What the conversation believes: cases written out, for the fuzz of the families does not name them."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import pytest
from driver_peers import (
    BusPeer,
    FaultyPeer,
    GaugePeer,
    ModbusTcpPeer,
    MutePeer,
    RtuPeer,
    ScannerPeer,
    scripted,
)

from drivers.base import IdentityError, InstrumentError, LinkError
from drivers.conversation import Conversation, NoAnswer, NotTheAnswer, Pace, Question, Stranger, always
from drivers.lines import Line, LineCodec
from drivers.registry import driver_class
from drivers.scripted import ScriptedClock, ScriptedPort

Answers = list[tuple[float, bytes]]
PACE = Pace(timeout_s=0.1, longest_reply_s=0.3, guard_s=0.0)


def number(line: Line) -> float:
    try:
        return float(line.text)
    except ValueError as error:
        raise NotTheAnswer(line.text) from error


def name(line: Line) -> str:
    if line.text != "GAUGE":
        raise Stranger(f"got {line.text}")
    return line.text


DATA: Question[Line, float] = Question(b"D\n", number, "data")
WHO: Question[Line, str] = Question(b"ID\n", name, "who", distinct=True)


def talk(far_end: Callable[[bytes], Answers], pace: Pace = PACE) -> tuple[Conversation[Line], ScriptedPort]:
    port = ScriptedPort(far_end)
    port.open(0.0)
    conversation: Conversation[Line] = Conversation(port, LineCodec(b"\n"), pace)
    conversation.begin()
    return conversation, port


def sound(sent: list[bytes], delay_s: float = 0.02) -> Callable[[bytes], Answers]:
    """A gauge that counts its answers from 1 on."""

    def far_end(data: bytes) -> Answers:
        sent.append(data)
        return [(delay_s, b"GAUGE\n" if data == b"ID\n" else b"%d\n" % sent.count(b"D\n"))]

    return far_end


def test_an_answer_to_somebody_before_us_is_waited_for_before_the_first_question() -> None:
    """It could come between a quickly answered identity and the answer to the first reading."""
    conversation, port = talk(sound([]))
    port.say(0.03, b"99\n")
    assert conversation.introduce(always(WHO)) == "GAUGE"
    assert conversation.ask(DATA, port.clock.now_s() + 1.0) == 1.0


def test_bytes_that_nobody_asked_for_put_the_conversation_in_doubt() -> None:
    """Perhaps the answers have been one behind for a while: the canary finds out."""
    sent: list[bytes] = []
    conversation, port = talk(sound(sent))
    conversation.introduce(always(WHO))
    assert conversation.ask(DATA, port.clock.now_s() + 1.0) == 1.0
    port.say(0.0, b"99\n")
    del sent[:]
    assert conversation.ask(DATA, port.clock.now_s() + 2.0) == 1.0
    assert sent == [b"ID\n", b"D\n"]
    assert conversation.resyncs == 1


def test_stray_line_ends_between_answers_are_no_reason_for_doubt() -> None:
    """An instrument that sends CR LF where LF ends the line, or a blank line, is sound."""
    sent: list[bytes] = []
    conversation, port = talk(sound(sent))
    conversation.introduce(always(WHO))
    for _ in range(3):
        port.say(0.0, b"\r\n \n")
        assert isinstance(conversation.ask(DATA, port.clock.now_s() + 1.0), float)
    assert conversation.resyncs == 0
    assert sent.count(b"ID\n") == 1


def test_after_a_time_out_nothing_is_asked_until_the_longest_reply_time_is_over() -> None:
    """The trap: asked again at once, the late answer would look like the new one."""
    sent: list[tuple[float, bytes]] = []
    clock = ScriptedClock(0.0)

    def far_end(data: bytes) -> Answers:
        sent.append((clock.now_s(), data))
        return [(0.25 if len(sent) == 2 else 0.02, b"GAUGE\n" if data == b"ID\n" else b"%d\n" % len(sent))]

    port = ScriptedPort(far_end, clock)
    port.open(0.0)
    conversation: Conversation[Line] = Conversation(port, LineCodec(b"\n"), PACE)
    conversation.begin()
    conversation.introduce(always(WHO))
    asked_s = clock.now_s()
    late = conversation.ask(DATA, clock.now_s() + 1.0)
    assert isinstance(late, NoAnswer)
    assert clock.now_s() - asked_s == pytest.approx(PACE.timeout_s, abs=0.001)
    assert conversation.ask(DATA, clock.now_s() + 1.0) == 4.0
    assert [data for _, data in sent] == [b"ID\n", b"D\n", b"ID\n", b"D\n"]
    assert sent[2][0] - sent[1][0] >= PACE.longest_reply_s


def test_an_answer_later_than_the_longest_reply_time_is_found_out_by_the_canary() -> None:
    """Where answers keep the order of their questions, what comes before the canary's answer is the past."""
    waiting: list[bytes] = []

    def far_end(data: bytes) -> Answers:
        answer = b"GAUGE\n" if data == b"ID\n" else b"%d\n" % len(waiting)
        waiting.append(answer)
        if len(waiting) == 2:
            return []  # kept back, and sent before the answer to the next question
        if len(waiting) == 3:
            return [(0.02, waiting[1]), (0.05, answer)]
        return [(0.02, answer)]

    conversation, port = talk(far_end)
    conversation.introduce(always(WHO))
    answers = [conversation.ask(DATA, port.clock.now_s() + 1.0) for _ in range(3)]
    assert [a for a in answers if not isinstance(a, NoAnswer)] == [4.0]


def test_a_stranger_must_give_the_same_wrong_answer_twice() -> None:
    """Once may be the answer to somebody before us; then it is waited out and asked again."""
    conversation, _ = talk(lambda data: [(0.02, b"OTHER\n")])
    with pytest.raises(IdentityError, match="got OTHER"):
        conversation.introduce(always(WHO))
    answers = iter([b"12.5\n", b"GAUGE\n"])
    conversation, _ = talk(lambda data: [(0.02, next(answers))])
    assert conversation.introduce(always(WHO)) == "GAUGE"


@pytest.mark.parametrize("second", [[], [(0.02, b"ANOTHER\n")]])
def test_a_single_wrong_answer_is_no_stranger(second: Answers) -> None:
    """A person is called for an identity, not for noise."""
    answers = iter([[(0.02, b"OTHER\n")], second])
    conversation, _ = talk(lambda data: next(answers))
    with pytest.raises((LinkError, InstrumentError)):
        conversation.introduce(always(WHO))


def test_a_canary_that_was_answered_twice_proves_nothing() -> None:
    """The first may have been the late answer to the question before: the canary is sent again."""
    sent: list[bytes] = []

    def far_end(data: bytes) -> Answers:
        sent.append(data)
        lines = {1: [], 2: [(0.01, b"1\n"), (0.15, b"2\n")]}  # the first answer comes after its time
        return lines.get(len(sent), [(0.01, b"%d\n" % len(sent))])

    conversation, port = talk(far_end)
    conversation.canaries = [always(DATA)]
    answers = [conversation.ask(DATA, port.clock.now_s() + 2.0) for _ in range(3)]
    # 1: a canary in vain; 2: a canary answered twice; 3: a canary, and silence; 4: the question
    assert len(sent) == 5
    assert [a for a in answers if not isinstance(a, NoAnswer)] == [4.0, 5.0]


def test_questions_of_one_voice_keep_their_distance_and_others_do_not() -> None:
    """Only answers that could be taken for one another need the time."""
    conversation, port = talk(sound([], delay_s=0.01), Pace(0.1, 0.3, 0.3))
    conversation.introduce(always(WHO))
    other: Question[Line, float] = Question(b"D\n", number, "other")
    starts = []
    for question in (DATA, other, DATA):
        conversation.ask(question, port.clock.now_s() + 1.0)
        starts.append(port.clock.now_s())
    assert starts[1] - starts[0] < 0.05
    assert starts[2] - starts[0] >= 0.29


FAMILIES: list[tuple[str, type[FaultyPeer]]] = [
    ("textline", GaugePeer), ("textline", BusPeer), ("textline", MutePeer), ("scpi", ScannerPeer),
    ("modbus", RtuPeer), ("modbus", ModbusTcpPeer),
]  # fmt: skip


@pytest.mark.parametrize(("family", "peer_class"), FAMILIES)
@pytest.mark.parametrize("how", ["silent", "late", "twice", "babbling", "garbled", "cut", "drip"])
def test_after_one_bad_poll_the_second_next_is_good_without_opening_again(
    family: str, peer_class: type[FaultyPeer], how: str
) -> None:
    """Resynchronised within two polls, at one poll a second."""
    for seed in range(10):
        peer = peer_class(seed, timeout_s=0.1, longest_s=0.2)
        port = scripted(peer)
        rtu = {"framing": "rtu"} if peer_class is RtuPeer else {}
        options: dict[str, Any] = {"port": "socket://scripted:1", "timeout_s": 0.1, "longest_reply_s": 0.2}
        make: Any = driver_class(family)
        driver = make({**options, **rtu, **peer_class.options}, port=port)  # type: ignore[attr-defined]
        driver.open()
        driver.identify()
        # the first request of one poll meets the fault
        moods = iter([how])
        peer.mood = lambda moods=moods: next(moods, "well")
        polls = []
        for _ in range(3):
            started_s = port.clock.now_s()
            polls.append([r.quality for r in driver.poll(0.9)])
            port.clock.sleep(started_s + 1.0 - port.clock.now_s())
        assert set(polls[2]) == {"good"}, (seed, polls)
        assert port.opened == 1
