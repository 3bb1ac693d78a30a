"""Ask over one wire and believe the answer to that question and to no other.

Most laboratory protocols number neither questions nor answers. If an answer comes late, or twice,
every later answer can be off by one and look perfectly sound. So a conversation is either *trusted*
or *in doubt*:

* Trusted: before each question the input must be empty. Exactly one line must come back, within
  ``timeout_s``, and it must fit the question. Anything else puts the conversation in doubt.
* In doubt: nothing is asked until ``longest_reply_s`` after the last question was sent and until the
  line is silent. What arrives is thrown away. Then a canary question must be answered as it should. If
  the canary's answer could be mistaken for that of another question, silence for ``longest_reply_s``
  must follow once more.

``voice`` names what an answer can be told apart by: questions of one voice have answers that could be
taken for one another, and are sent at least ``guard_s`` apart. With ``guard_s`` = ``longest_reply_s``
no answer that arrives within ``longest_reply_s`` of its own question, be it the first or a repeated one,
can be attributed to another question, whatever else is lost or garbled. With less, a repeated answer
that comes later than ``guard_s`` and between another question and its answer cannot be told from that one.
An answer later than ``longest_reply_s`` is still found out where answers keep the order of their questions
and the canary asks for the identity: whatever came before the canary's answer is the past.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from enum import Enum
from typing import Final, Generic, Protocol, TypeVar

from drivers.base import GARBLED, MISSING, DriverError, IdentityError, InstrumentError, LinkError
from drivers.lines import Garbled
from drivers.options import OptionReader
from drivers.transport import CHUNK, Transport

M = TypeVar("M")
"""What an undamaged answer is: a line, a frame."""
T = TypeVar("T")
T_co = TypeVar("T_co", covariant=True)
GAP_S: Final = 0.05
"""Silence after the last stray byte before it counts as the end of what was being sent."""
START_S: Final = 1.0
"""Silence before the first question on a serial port just opened (less if no answer takes that long)."""
WARM_UP_S: Final = 5.0
"""Time for coming into step with several units of which the first may be dead."""
FAILED_POLLS: Final = 2
"""Polls in a row without any answer after which the link needs a remedy."""


class NotTheAnswer(Exception):  # noqa: N818 - a verdict, not a failure of the program
    """Raised by a question's ``read``: this does not answer it."""


class Stranger(NotTheAnswer):
    """Raised by the ``read`` of a question for identity: this is the answer of another instrument."""


class Codec(Protocol[M]):
    """Cuts a byte stream into answers; any slicing, bounded memory, garbage is an event."""

    blank: bytes
    """Bytes that may stand between answers without meaning anything."""

    @property
    def midway(self) -> bool: ...
    def reset(self) -> None: ...
    def feed(self, data: bytes) -> list[M | Garbled]: ...


@dataclass(frozen=True, slots=True)
class Question(Generic[M, T_co]):
    """What is sent, and how its answer is read (``read`` raises NotTheAnswer for any other)."""

    request: bytes
    read: Callable[[M], T_co]
    voice: str = ""
    distinct: bool = False
    """Whether its answer cannot be mistaken for that of any question for readings."""
    echoed: M | None = None
    """What the instrument sends back before its answer, where it repeats what it was sent."""


def always(question: Question[M, T]) -> Callable[[], Question[M, T]]:
    """For a question that is the same each time it is asked."""
    return lambda: question


@dataclass(frozen=True, slots=True)
class NoAnswer:
    """Why there is no answer; ``asked`` False if the question was not even sent."""

    quality: str
    why: str
    asked: bool = True
    stranger: bool = False


_OUT_OF_STEP: Final = NoAnswer(MISSING, "waiting for the line to come back into step", asked=False)


@dataclass(frozen=True, slots=True)
class Pace:
    """The times of a conversation [s]."""

    timeout_s: float
    longest_reply_s: float
    guard_s: float


def read_pace(options: OptionReader, timeout_s: float, alike: bool, nameless: bool) -> Pace:
    """Check ``timeout_s``, ``longest_reply_s`` and ``guard_s``.

    ``longest_reply_s`` is the time-out unless given, and twice that for an instrument that cannot say
    who it is (``nameless``): there the canary's answer is like any other. ``guard_s`` is as long where
    several questions have answers that look ``alike``, else 0: the polls themselves are apart.
    """
    timeout_s = options.number("timeout_s", timeout_s, least=0.005, most=60.0)
    longest_s = options.number(
        "longest_reply_s", timeout_s * (2.0 if nameless else 1.0), least=0.005, most=600.0
    )
    if longest_s < timeout_s:
        options.wrong("longest_reply_s", f"got {longest_s:g}, need at least timeout_s ({timeout_s:g})")
    guard_s = options.number("guard_s", longest_s if alike else 0.0, least=0.0, most=600.0)
    return Pace(timeout_s, longest_s, guard_s)


class _Trust(Enum):
    YES = "yes"
    QUIET = "silence, then the canary"
    SETTLE = "silence, then trusted"


class Conversation(Generic[M]):
    """The dialogue over one transport. Not for several threads."""

    def __init__(self, port: Transport, codec: Codec[M], pace: Pace) -> None:
        self.port = port
        self.pace = pace
        self.canaries: Sequence[Callable[[], Question[M, object]]] = ()
        """Make questions fit to show that the dialogue is in step; the next one is tried when one fails."""
        self.failures = 0
        """Questions that were not answered as they should, and lines too noisy to ask at all."""
        self.resyncs = 0
        """How often the conversation came into doubt."""
        self._failures_seen = 0
        self._failed_polls = 0
        self._trouble = NoAnswer(MISSING, "nothing was asked", asked=False)
        self._codec = codec
        self._trust = _Trust.QUIET
        self._quiet_until_s = 0.0
        self._sent_s: dict[str, float] = {}

    def begin(self) -> None:
        """Start anew on a port just opened; an answer to somebody before us may still be on its way."""
        self._codec.reset()
        self._trust = _Trust.QUIET
        quiet_s = GAP_S if self.port.fresh else START_S
        self._quiet_until_s = self.port.clock.now_s() + min(quiet_s, self.pace.longest_reply_s)
        self._sent_s.clear()
        self._failed_polls = 0

    def introduce(self, make: Callable[[], Question[M, T]]) -> T:
        """Ask who is there and return what it says; its answer is as good as a canary's.

        Silence comes first: an answer to somebody before us may still be on its way. Asked a second time
        where the first answer does not fit. Raises IdentityError if both answers are the same and a
        stranger's, InstrumentError if they are garbage, LinkError if there are none. Takes at most twice
        ``timeout_s`` + ``longest_reply_s``, and ``longest_reply_s`` more if the answer is not distinct.
        """
        self.canaries = [make]
        patience_s = 2.0 * (self.pace.timeout_s + self.pace.longest_reply_s)
        until_s = self.port.clock.now_s() + patience_s
        strangers: list[str] = []
        for _ in range(2):
            if not self._silence(until_s):
                continue
            question = make()
            answer = self._exchange(question, until_s)
            if not isinstance(answer, NoAnswer):
                self._believe(question)
                self.in_step(until_s + self.pace.longest_reply_s)
                return answer
            if answer.stranger:
                strangers.append(answer.why)
        if len(strangers) == 2 and strangers[0] == strangers[1]:
            raise IdentityError(f"{self.port.name}: {strangers[0]}")
        raise self._complaint()

    def warm_up(self) -> None:
        """Come into step with an instrument that cannot say who it is; each canary is tried once.

        Raises LinkError if it stays silent, InstrumentError if it answers with garbage.
        """
        now_s, pace = self.port.clock.now_s(), self.pace
        until_s = now_s + max(2.0 * (pace.timeout_s + pace.longest_reply_s), WARM_UP_S)
        for _ in self.canaries:
            if self.in_step(until_s):
                return
        raise self._complaint()

    def ask(self, question: Question[M, T], until_s: float) -> T | NoAnswer:
        """Return the answer, or why there is none, before ``until_s``. LinkError when the wire fails."""
        answer: T | NoAnswer = _OUT_OF_STEP
        for _ in range(2):  # a second try only if the first found the line in doubt before it asked
            if not self.in_step(until_s):
                return _OUT_OF_STEP
            answer = self._exchange(question, until_s)
            if not isinstance(answer, NoAnswer) or answer.asked or self._trust is _Trust.YES:
                break
        return answer

    def end_of_poll(self, answered: bool) -> None:
        """Close a poll; ``answered`` says whether any of its questions was.

        Raises LinkError (silence) or InstrumentError (garbage) from the second poll in a row on in
        which something was tried and nothing was answered.
        """
        tried, self._failures_seen = self.failures > self._failures_seen, self.failures
        if answered:
            self._failed_polls = 0
            return
        self._failed_polls += tried
        if self._failed_polls >= FAILED_POLLS:
            raise self._complaint()

    def tell(self, command: bytes, until_s: float) -> None:
        """Send what has no answer."""
        self.port.write(command, until_s)

    def in_step(self, until_s: float) -> bool:
        """Bring the conversation back into step if it is in doubt; False if time was too short."""
        while self._trust is not _Trust.YES:
            if not self._silence(until_s):
                return False
            if self._trust is _Trust.SETTLE or not self.canaries:
                self._trust = _Trust.YES
                return True
            canary, *others = self.canaries
            question = canary()
            answer = self._exchange(question, until_s)
            if isinstance(answer, NoAnswer):
                if answer.asked:
                    self.canaries = [*others, canary]
                return False
            self._believe(question)
        return True

    def _believe(self, canary: Question[M, object]) -> None:
        """A canary was answered as it should: that is enough if nothing else is answered like that."""
        self._trust = _Trust.YES if canary.distinct else _Trust.SETTLE
        self._quiet_until_s = self.port.clock.now_s() + self.pace.longest_reply_s

    def _complaint(self) -> DriverError:
        text = f"{self.port.name}: {self._trouble.why}"
        return InstrumentError(text) if self._trouble.quality == GARBLED else LinkError(text)

    def _silence(self, until_s: float) -> bool:
        """Throw away what arrives until the line has been silent long enough."""
        clock = self.port.clock
        noisy = False
        while True:
            stray = self._stray(min(self._quiet_until_s, until_s))
            now_s = clock.now_s()
            if stray:
                noisy = True
                self._trust = _Trust.QUIET
                self._quiet_until_s = max(self._quiet_until_s, now_s + min(GAP_S, self.pace.longest_reply_s))
            elif now_s >= self._quiet_until_s:
                return True
            if now_s >= until_s:
                if noisy:
                    self.failures += 1
                    self._trouble = NoAnswer(GARBLED, "bytes without end; no chance to ask")
                return False

    def _stray(self, until_s: float) -> bool:
        """Take what arrives up to ``until_s``, or is there; True as soon as it is more than blanks."""
        for _ in range(256):
            data = self.port.read(CHUNK, until_s)
            if not data:
                return False
            if data.strip(self._codec.blank):
                self.port.flush_input()
                return True
        return True

    def _doubt(self, sent_s: float, trouble: NoAnswer) -> NoAnswer:
        self._trouble = trouble
        self.resyncs += self._trust is _Trust.YES
        self.failures += 1
        self._trust = _Trust.QUIET
        self._quiet_until_s = max(sent_s + self.pace.longest_reply_s, self.port.clock.now_s() + GAP_S)
        return trouble

    def _exchange(self, question: Question[M, T], until_s: float) -> T | NoAnswer:
        clock, pace = self.port.clock, self.pace
        free_s = self._sent_s.get(question.voice, -1e300) + pace.guard_s
        if free_s >= until_s or clock.now_s() >= until_s:
            return NoAnswer(MISSING, "no time left to ask", asked=False)
        if self._stray(free_s):
            last_s = max(self._sent_s.values(), default=clock.now_s())
            return self._doubt(last_s, NoAnswer(GARBLED, "bytes came that nobody asked for", asked=False))
        self._codec.reset()
        self.port.write(question.request, min(until_s, clock.now_s() + pace.timeout_s))
        sent_s = clock.now_s()
        self._sent_s[question.voice] = sent_s
        try:
            answer = question.read(self._one_answer(question, min(until_s, sent_s + pace.timeout_s)))
        except _Silent as silent:
            return self._doubt(sent_s, NoAnswer(GARBLED if self._codec.midway else MISSING, str(silent)))
        except NotTheAnswer as mismatch:
            stranger = isinstance(mismatch, Stranger)
            return self._doubt(sent_s, NoAnswer(GARBLED, str(mismatch), stranger=stranger))
        return answer

    def _one_answer(self, question: Question[M, T], until_s: float) -> M:
        echo_due = question.echoed is not None
        while True:
            data = self.port.read(CHUNK, until_s)
            if not data:
                raise _Silent(f"no answer to {question.request!r} in time")
            events = self._codec.feed(data)
            if events and echo_due:
                first = events.pop(0)
                if first != question.echoed:
                    raise NotTheAnswer(f"got {_show(first)}, need the echo {question.echoed!r}")
                echo_due = False
            if not events:
                continue
            answer = events[0]
            if isinstance(answer, Garbled):
                raise NotTheAnswer(f"got {_show(answer)}")
            if len(events) > 1 or self._codec.midway:
                raise NotTheAnswer(f"got more than one answer to {question.request!r}")
            return answer


class _Silent(Exception):  # noqa: N818 - as above
    pass


def _show(event: object) -> str:
    text = f"{event.raw!r} ({event.why})" if isinstance(event, Garbled) else repr(event)
    return text if len(text) <= 120 else text[:117] + "..."
