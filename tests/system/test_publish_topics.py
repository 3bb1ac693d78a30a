"""The MQTT contract: topics nobody can misread, payloads as their schemas say."""

from __future__ import annotations

import json
from importlib.resources import files
from typing import Any
from urllib.parse import unquote

import pytest
from hypothesis import given
from hypothesis import strategies as st
from jsonschema import Draft202012Validator
from jsonschema.exceptions import ValidationError

from daq.core import alarms
from daq.core.alarms import AlarmEntry
from daq.core.block import Cue
from daq.core.catalogue import CATALOGUE
from daq.publish import rows_for, topics
from daq.records import Finding

T0 = 17_671_500_000_000
"""2025-12-31T03:00:00Z in ticks."""
SCHEMAS = ("alarm", "event", "heartbeat", "online", "status")


def schema(name: str) -> Draft202012Validator:
    text = (files("daq") / "schemas" / f"mqtt_{name}.json").read_text(encoding="utf-8")
    return Draft202012Validator(json.loads(text), format_checker=Draft202012Validator.FORMAT_CHECKER)


def check(name: str, payload: bytes) -> Any:
    body = json.loads(payload)
    schema(name).validate(body)
    return body


def finding(kind: str, frame: str = "H1", **fields: Any) -> Finding:
    return Finding(f"{frame}|S-1|{kind}|k|1", T0, 12.5, frame, kind, fields)


@given(st.text(max_size=12))
def test_any_name_is_one_level_and_can_be_read_back(name: str) -> None:
    """MQTT 3.1.1, 4.7: no wildcard, no U+0000, no separator; and never the sign for "none"."""
    level = topics.level(name)
    assert level
    assert not set(level) & set("/+#\0@$%") - {"%"}
    assert (level == "-") == (name == "")
    if name:
        assert unquote(level) == name


@given(
    st.text(min_size=1, max_size=8), st.text(max_size=8), st.text(min_size=1, max_size=8), st.text(max_size=8)
)
def test_topics_differ_where_their_parts_differ(frame: str, position: str, alarm: str, subject: str) -> None:
    """Always eight levels for an alarm, so a subscription can name each of them."""
    test = frame.replace("/", "") + ("/" + position if position else "")
    if not test or test.startswith("/"):
        return
    parts = topics.alarm_topic("hall a", test, alarm, subject, "h").split("/")
    assert len(parts) == 8
    assert [unquote(p) if p != "-" else "" for p in parts[4:]] == [
        test.partition("/")[0], test.partition("/")[2], alarm, subject,
    ]  # fmt: skip


def test_a_host_cannot_be_taken_for_a_frame() -> None:
    """A frame may be named like a host, or begin with the sign for one."""
    assert topics.event_topic("s", "", "pi-4") == "upturn/1/s/event/@pi-4/-"
    assert topics.event_topic("s", "@pi-4", "pi-4") == "upturn/1/s/event/%40pi-4/-"
    assert topics.event_topic("s", "H1/-", "h") == "upturn/1/s/event/H1/%2D"


def test_every_schema_is_one_and_names_version_1() -> None:
    """The schemas are shipped for those who write subscribers."""
    for name in SCHEMAS:
        validator = schema(name)
        Draft202012Validator.check_schema(validator.schema)
        with pytest.raises(ValidationError):
            validator.validate({"v": 2, "site": "s", "host": "h"})


def life(alarm: str, subject: str) -> list[Finding]:
    """Return the findings of an alarm from raised to normal, as the chain would make them."""
    cues = [
        Cue(0, T0, alarm, subject, True, "it happened", T0 + 10, {"strain": 0.0183}),
        AlarmEntry(1, T0 + 10**10, "acknowledge", initials="ab"),
        Cue(2, T0 + 2 * 10**10, alarm, subject, False),
        AlarmEntry(3, T0 + 4 * 10**10, "reset", initials="ab"),
    ]
    state, said = alarms.react(alarms.begin(), cues)
    _, late = alarms.pass_time(state, T0 + 6 * 10**10, 4)
    return [
        Finding(f"H1|S-1|alarm|{c.key}|{i}", c.tick, 1.0, "H1", c.kind, c.fields)
        for i, c in enumerate((*said, *late))
    ]


@pytest.mark.parametrize("alarm", list(CATALOGUE))
def test_every_alarm_of_the_catalogue_fits_the_schemas_and_clears_its_topic(alarm: str) -> None:
    """From raised to normal: an event each, the retained state beside it, and nothing left at the end."""
    kept: dict[str, bytes] = {}
    said = life(alarm, "mid")
    assert said
    for f in said:
        rows = rows_for(f, "s", "h")
        event = check("event", rows[0].payload)
        assert (rows[0].id, rows[0].topic, rows[0].retain) == (f.id, "upturn/1/s/event/H1/-", False)
        assert event["id"] == f.id
        assert event["can_wait_until"] in (None, "2025-12-31T03:00:00.0010Z")
        for row in rows[1:]:
            assert row.retain
            assert row.id == f"{f.id}|state"
            assert row.topic == f"upturn/1/s/alarm/H1/-/{alarm}/mid"
            kept[row.topic] = row.payload
            if row.payload:
                assert check("alarm", row.payload)["state"] == f.fields["state"]
        assert len(rows) == (1 if CATALOGUE[alarm].notice else 2)
    if not CATALOGUE[alarm].notice:
        assert list(kept.values()) == [b""]


@pytest.mark.parametrize(
    "f",
    [
        finding(
            "stage",
            stage="tertiary",
            onset_h=1.0,
            onset_low_h=0.5,
            onset_high_h=2.0,
            withdraws=None,
            why="w",
            **{"from": "secondary"},
        ),
        finding(
            "minimum_rate",
            rate_per_h=1e-5,
            low_per_h=9e-6,
            high_per_h=1.1e-5,
            time_h=3.0,
            corrected_rate_per_h=None,
        ),
        finding("onset", definition="offset_0p2_percent", time_h=None),
        finding("milestone", strain=0.01, time_h=100.0),
        finding("excursion", channel="mid", from_h=1.0, to_h=2.0, worst_c=984.0, limit_c=983.0),
        finding("step", channels=["left"], time_h=1.0, size=1e-4, cause="slip"),
        finding("forecast", of="rupture", low_h=1.0, median_h=2.0, high_h=3.0, coverage=0.9),
        finding("forecast", of="rupture", none_because="no tertiary yet"),
        finding("entry", "H1/top", entry="loaded", initials="ab", values={}, note=""),
        finding("summary", result={"tu_h": float("nan")}),
    ],
    ids=lambda f: f.kind,
)
def test_findings_of_every_kind_fit_the_event_schema(f: Finding) -> None:
    """The kinds and fields that outside programs rely on; a number that is none becomes null."""
    (row,) = rows_for(f, "s", "h")
    body = check("event", row.payload)
    assert body["at"] == "2025-12-31T03:00:00.0000Z"
    assert row.topic.split("/")[4:] == [*f.frame.split("/"), "-"][:2]


def test_a_finding_without_its_fields_does_not_fit() -> None:
    """The schema must be able to say no."""
    with pytest.raises(ValidationError):
        check("event", rows_for(finding("milestone", strain=0.01), "s", "h")[0].payload)
    with pytest.raises(ValidationError):
        check("event", rows_for(finding("forecast", of="rupture"), "s", "h")[0].payload)


def test_a_status_carries_dates_not_ticks_and_names_open_alarms() -> None:
    """What the engine keeps in ticks leaves the house as ISO 8601."""
    told = {
        "at_tick": T0,
        "test_h": 3.0,
        "stage": "secondary",
        "strain": 0.01,
        "rate_per_h": float("nan"),
        "alarms": [
            {
                "alarm": "rupture",
                "subject": "",
                "state": alarms.State.UNACKNOWLEDGED,
                "priority": "high",
                "message": "m",
                "since_tick": T0,
                "can_wait_until_tick": None,
            },
            {
                "alarm": "milestone_reached",
                "subject": "0.01",
                "state": "noted",
                "priority": "notice",
                "message": "",
            },
        ],
    }
    body = check("status", topics.status_payload("s", "h", "H1", told))
    assert body["at"] == "2025-12-31T03:00:00.0000Z"
    assert body["rate_per_h"] is None
    assert body["alarms"][0]["since"] == body["at"]
    assert body["alarms"][0]["state"] == "unacknowledged"
    assert topics.open_alarm_topics("s", "h", "H1", told) == {"upturn/1/s/alarm/H1/-/rupture/-"}


def test_birth_and_heartbeat_fit_their_schemas() -> None:
    """Small payloads, but a monitoring system lives on them."""
    check("online", topics.payload("s", "h", {"state": "online"}))
    check("heartbeat", topics.payload("s", "h", {"at": "2025-12-31T03:00:00.0000Z", "waiting": 0, "sent": 3}))
    with pytest.raises(ValidationError):
        check("online", topics.payload("s", "h", {"state": "asleep"}))
