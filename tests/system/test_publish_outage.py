"""When the broker is away: what is told and when, and how long the publisher waits."""

from __future__ import annotations

import pytest

from daq.publish.link import Cause
from daq.publish.outage import SHORT_MOST, Outage, Pace

REFUSED = Cause("nobody listens")
PASSWORD = Cause("wrong password", settled=True)


@pytest.fixture
def told() -> list[tuple[bool, str]]:
    return []


@pytest.fixture
def outage(told: list[tuple[bool, str]]) -> Outage:
    return Outage(Pace(), "b:8883", "upturn-s-h", lambda active, text: told.append((active, text)))


def test_waits_grow_with_jitter_and_stay_bounded(outage: Outage) -> None:
    """A hall of daemons must not knock at a restarted broker all at once, nor give up for long."""
    waits = [outage.lost(REFUSED, float(t)) for t in range(200)]
    assert 0.25 <= waits[0] <= 0.5
    assert max(waits) <= 30.0
    assert min(waits[20:]) >= 15.0
    assert len({round(w, 6) for w in waits[20:]}) > 100
    assert 30.0 <= outage.lost(PASSWORD, 300.0) <= 60.0


def test_a_short_absence_is_not_told_a_long_one_once(outage: Outage, told: list[tuple[bool, str]]) -> None:
    """A broker that restarts within seconds is nobody's business."""
    outage.lost(REFUSED, 0.0)
    outage.look(4.9)
    outage.proven(0.1)
    assert told == []
    outage.lost(REFUSED, 10.0)
    for t in range(10, 50):
        outage.look(float(t))
    assert told == [(True, "nobody listens")]
    outage.proven(0.1)
    outage.proven(0.2)
    assert told == [(True, "nobody listens"), (False, "b:8883 acknowledges again")]


def test_what_a_person_must_mend_is_told_at_once_and_replaces_a_guess(
    outage: Outage, told: list[tuple[bool, str]]
) -> None:
    """A wrong password does not get better by waiting; a changing guess is told once a minute at most."""
    outage.begin(0.0)
    outage.look(6.0)
    outage.lost(REFUSED, 7.0)
    outage.look(7.0)
    outage.lost(PASSWORD, 8.0)
    outage.look(8.0)
    outage.lost(REFUSED, 9.0)
    outage.look(9.0)
    outage.look(68.0)
    assert [text for _, text in told] == ["b:8883: no answer yet", "wrong password", "nobody listens"]


def test_connections_that_end_soon_raise_a_suspicion_and_must_last_to_clear_it(
    outage: Outage, told: list[tuple[bool, str]]
) -> None:
    """Not every broker says that another client took the name."""
    for t in range(SHORT_MOST):
        cause, choked = outage.hung_up(REFUSED, 0.5, None)
        outage.lost(cause, float(t))
        assert not choked
    outage.look(3.0)
    assert told[-1][0]
    assert "same client id 'upturn-s-h'" in told[-1][1]
    outage.proven(0.5)
    assert told[-1][0]
    outage.proven(5.0)
    assert not told[-1][0]
    assert outage.hung_up(REFUSED, 60.0, None) == (REFUSED, False)
    assert outage.hung_up(REFUSED, 0.5, None) == (REFUSED, False)


def test_a_row_on_which_the_broker_hangs_up_three_times_is_set_aside(outage: Outage) -> None:
    """The same row each time; another row in between begins the count anew."""
    assert [outage.hung_up(REFUSED, 0.1, row)[1] for row in (7, 7, 8, 7, 7, 7)] == [False] * 5 + [True]
