"""The whole chain: cuts, truncation, restarts, entries."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from hypothesis import HealthCheck, Phase, given, settings
from hypothesis import strategies as st
from rig_facts import facts_of

from daq.codec import decode_fact, decode_state, encode_fact, encode_finding, encode_state
from daq.core import chain, follow
from daq.core.chain import TestState
from daq.records import EntryMade, Fact, Finding, RulesAdopted, Stamp
from simulator.population import draw
from simulator.rig import Run, simulate

SEED = 20
RIGS = (1, 3, 4, 7)


@cache
def _run(index: int) -> Run:
    return simulate(draw(SEED, index))


def _through(facts: list[Fact], state: TestState | None = None) -> tuple[TestState, list[Finding]]:
    findings: list[Finding] = []
    for fact in facts:
        if state is None:
            assert isinstance(fact, RulesAdopted)
            state = chain.begin(fact)
        state, said = chain.step(state, fact)
        findings += said
    assert state is not None
    return state, findings


@cache
def _whole(index: int) -> tuple[TestState, list[Finding]]:
    """The whole record in one block; what everything else is held against."""
    return _through(facts_of(_run(index)))


def _lines(findings: list[Finding]) -> list[str]:
    return [encode_finding(f) for f in findings]


@pytest.mark.parametrize("index", RIGS)
@settings(
    max_examples=3, deadline=None, phases=[Phase.generate], suppress_health_check=[HealthCheck.too_slow]
)
@given(data=st.data())
def test_findings_and_state_do_not_depend_on_cuts(index: int, data: st.DataObject) -> None:
    """Live the core gets one scan at a time, in a replay thousands: it must be the same test."""
    run = _run(index)
    n = len(run.columns["time_s"])
    cuts = data.draw(st.lists(st.integers(1, n - 1), max_size=60))
    whole_state, whole = _whole(index)
    state, pieces = _through(facts_of(run, cuts))
    assert _lines(pieces) == _lines(whole)
    assert encode_state(state) == encode_state(whole_state)


def test_a_scan_at_a_time_is_the_same_to_the_bit() -> None:
    """The live case itself, on a stretch long enough to hold looks and steps."""
    run = _run(RIGS[0])
    first = min(400, len(run.columns["time_s"]))
    whole_state, whole = _through(facts_of(run, first=first))
    state, pieces = _through(facts_of(run, range(1, first), first=first))
    assert _lines(pieces) == _lines(whole)
    assert encode_state(state) == encode_state(whole_state)


@pytest.mark.parametrize("index", RIGS)
@pytest.mark.parametrize("share", [0.15, 0.5, 0.83])
def test_findings_of_a_truncated_record_are_a_prefix(index: int, share: float) -> None:
    """Nothing may know the future: what is said at a moment stands on what came before it."""
    run = _run(index)
    n = len(run.columns["time_s"])
    _, whole = _whole(index)
    _, part = _through(facts_of(run, first=int(share * n)))
    assert _lines(whole)[: len(part)] == _lines(part)


@pytest.mark.parametrize("index", RIGS[:2])
def test_killed_and_rebuilt_equals_never_killed(index: int) -> None:
    """A snapshot that went through bytes, then the facts after it, gives the same state."""
    run = _run(index)
    n = len(run.columns["time_s"])
    facts = [decode_fact(encode_fact(f)) for f in facts_of(run, range(97, n, 97))]
    at = len(facts) // 2
    whole_state, whole = _through(facts)
    half_state, first = _through(facts[:at])
    back = decode_state(encode_state(half_state))
    state, second = _through(facts[at:], back)
    assert encode_state(state) == encode_state(whole_state)
    assert _lines(first + second) == _lines(whole)


def test_ids_of_findings_are_unique_and_name_the_test() -> None:
    """Deliveries are told apart by id alone."""
    _, findings = _whole(RIGS[1])
    ids = [f.id for f in findings]
    assert len(ids) == len(set(ids))
    assert all(i.startswith("H1|S-1|") for i in ids)


def test_an_acknowledgement_reaches_the_alarm_and_is_signed() -> None:
    """Who saw an alarm is part of the record."""
    state, findings = _whole(RIGS[0])
    raised = [f for f in findings if f.kind == "alarm" and f.fields["state"] == "unacknowledged"]
    assert raised
    end = Stamp(state.clock.latest + 10, state.clock.latest + 10, "")
    state, said = chain.step(state, EntryMade(end, "H1", "acknowledge", "mk"))
    assert said
    assert {f.fields["initials"] for f in said} == {"mk"}
    assert all(f.fields["state"] in ("acknowledged", "normal") for f in said)


def test_a_rate_above_its_limit_is_an_alarm_once_the_rate_had_been_below_it() -> None:
    """The first hours are always fast; what the limit is for is the end."""
    facts = facts_of(_run(4))
    rules = facts[0]
    assert isinstance(rules, RulesAdopted)
    least = follow.status(_whole(4)[0].follow, chain.rules_of(rules.rules))["minimum_rate_per_h"]
    limited = rules.rules.replace('"rate_per_h":null', f'"rate_per_h":{3.0 * least!r}')
    assert limited != rules.rules
    _, findings = _through([RulesAdopted(rules.stamp, rules.frame, rules.test, limited), *facts[1:]])
    raised = [f for f in findings if f.kind == "alarm" and f.fields["alarm"] == "rate_limit"]
    tertiary = next(f for f in findings if f.kind == "stage" and f.fields["stage"] == "tertiary")
    assert raised
    assert raised[0].test_h is not None
    assert tertiary.fields["onset_h"] < raised[0].test_h


def test_before_the_entry_no_test_time_runs() -> None:
    """With ``starts: entry`` the heating is no creep test; the entry dates full load."""
    run = _run(RIGS[0])
    facts = facts_of(run, [200, 400])
    rules = facts[0]
    assert isinstance(rules, RulesAdopted)
    waiting = RulesAdopted(
        rules.stamp, rules.frame, rules.test, rules.rules.replace('"first_scan"', '"entry"')
    )
    state, _ = _through([waiting, facts[1]])
    assert state.start is None
    at = int(facts[2].boot_tick[0])  # type: ignore[union-attr]
    state, said = chain.step(state, EntryMade(Stamp(at, at, ""), "H1", "loaded", "mk", {"minutes_ago": 3}))
    assert [f.kind for f in said] == ["entry"]
    state, _ = chain.step(state, facts[2])
    assert state.start == at - 3 * 60 * 10_000
    assert np.isclose(chain.summary(state).test_h or 0, (state.clock.latest - state.start) / 36e6)
