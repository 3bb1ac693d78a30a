"""The MQTT contract, version 1: topics and payloads. Pure: no socket, no clock.

Names that MQTT or this contract could misread are escaped as in URLs (``/`` becomes ``%2F``).
POSITION is ``-`` where a frame holds one specimen, SUBJECT is ``-`` where an alarm has none. Findings
that concern a whole host stand under FRAME ``@HOST``.

==============================================  ========  ==============================================
topic                                           retained  payload
==============================================  ========  ==============================================
upturn/1/SITE/host/HOST/online                  yes       ``state``: ``online``; ``offline`` (also as will)
upturn/1/SITE/host/HOST/heartbeat               no        every ten seconds: how much waits, how much is sent
upturn/1/SITE/host/HOST/status                  yes       the host's own alarms
upturn/1/SITE/status/FRAME/POSITION             yes       stage, strain, rate, temperature, open alarms
upturn/1/SITE/alarm/FRAME/POSITION/NAME/SUBJECT yes       the alarm's present state; empty when normal
upturn/1/SITE/event/FRAME/POSITION              no        every finding, alarm transitions included
==============================================  ========  ==============================================

Every payload is a JSON object with ``v`` 1, ``site`` and ``host``; JSON Schemas are in
``daq/schemas``. New keys may come; a change of meaning makes it version 2. All is sent with QoS 1.
"""

from __future__ import annotations

import json
import math
import socket
from collections.abc import Mapping
from enum import Enum
from typing import Any, Final
from urllib.parse import quote

from daq.core.catalogue import CATALOGUE
from daq.lines import iso_utc
from daq.records import Finding
from daq.store.rows import OutboxNew

VERSION: Final = 1
ROOT: Final = f"upturn/{VERSION}"
NONE: Final = "-"
"""The level for "no position" and "no subject"."""
HOST: Final = ""
"""The name under which the engine keeps what concerns the whole host."""
THIS_HOST: Final = socket.gethostname()
_PLAIN: Final = " !\"&'()*,.:;<=>?[\\]^_`{|}~-"


def level(name: str) -> str:
    """Return ``name`` as one level of a topic: no separator, wildcard, control character or ``@``.

    Letters of any script stay as they are (MQTT is UTF-8); a name that is empty or just ``-`` cannot be
    taken for :data:`NONE`.
    """
    if not name:
        return NONE
    if name == NONE:
        return "%2D"
    return "".join(c if c.isalnum() or c in _PLAIN else quote(c, safe="") for c in name)


def place(test: str, host: str = THIS_HOST) -> str:
    """Return the two levels FRAME/POSITION of a test, or of the host where ``test`` is empty."""
    if test == HOST:
        return f"@{level(host)}/{NONE}"
    frame, _, position = test.partition("/")
    return f"{level(frame)}/{level(position)}"


def event_topic(site: str, test: str, host: str = THIS_HOST) -> str:
    return f"{ROOT}/{level(site)}/event/{place(test, host)}"


def alarm_topic(site: str, test: str, alarm: str, subject: str, host: str = THIS_HOST) -> str:
    return f"{ROOT}/{level(site)}/alarm/{place(test, host)}/{level(alarm)}/{level(subject)}"


def status_topic(site: str, test: str, host: str = THIS_HOST) -> str:
    if test == HOST:
        return host_topic(site, host, "status")
    return f"{ROOT}/{level(site)}/status/{place(test, host)}"


def host_topic(site: str, host: str, what: str) -> str:
    """``what`` is ``online``, ``heartbeat`` or ``status``."""
    return f"{ROOT}/{level(site)}/host/{level(host)}/{what}"


def payload(site: str, host: str, body: Mapping[str, Any]) -> bytes:
    """Return the bytes of one payload: canonical JSON, numbers that are none as null."""
    whole = {"v": VERSION, "site": site, "host": host, **body}
    return json.dumps(
        _plain(whole), sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False
    ).encode()


def rows_for(finding: Finding, site: str, host: str = THIS_HOST) -> list[OutboxNew]:
    """Return the outbox rows of one finding: its event, and for an alarm its retained state.

    The state goes out after the event, under an id of its own, and clears its topic when the alarm is
    normal. Notices are events only: nobody would ever clear them.
    """
    body = {
        "id": finding.id,
        "at": iso_utc(finding.at_tick),
        "test_h": finding.test_h,
        "frame": finding.frame,
        "kind": finding.kind,
        **finding.fields,
    }
    if body.get("can_wait_until") is not None:
        body["can_wait_until"] = iso_utc(body["can_wait_until"])
    rows = [OutboxNew(finding.id, event_topic(site, finding.frame, host), payload(site, host, body))]
    if finding.kind == "alarm" and not CATALOGUE[finding.fields["alarm"]].notice:
        topic = alarm_topic(site, finding.frame, finding.fields["alarm"], finding.fields["subject"], host)
        state = b"" if finding.fields["state"] == "normal" else payload(site, host, body)
        rows.append(OutboxNew(f"{finding.id}|state", topic, state, retain=True))
    return rows


def status_payload(site: str, host: str, test: str, told: Mapping[str, Any]) -> bytes:
    """Return the retained status of a test (or host): what the engine tells, UTC ticks as ISO 8601."""
    return payload(site, host, {"frame": test, **_dated(told)})


def open_alarm_topics(site: str, host: str, test: str, told: Mapping[str, Any]) -> set[str]:
    """Return the alarm topics that a status says should stand."""
    return {
        alarm_topic(site, test, a["alarm"], a["subject"], host)
        for a in told.get("alarms", ())
        if not CATALOGUE[a["alarm"]].notice
    }


def _dated(value: Any) -> Any:
    if isinstance(value, Mapping):
        return dict(_dated_item(k, v) for k, v in value.items())
    if isinstance(value, list | tuple):
        return [_dated(v) for v in value]
    return value


def _dated_item(key: str, value: Any) -> tuple[str, Any]:
    if key.endswith("_tick"):
        return key.removesuffix("_tick"), None if value is None else iso_utc(value)
    return key, _dated(value)


def _plain(value: Any) -> Any:
    if isinstance(value, Enum):
        return value.value
    if isinstance(value, float) and not math.isfinite(value):
        return None
    if isinstance(value, Mapping):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(v) for v in value]
    return value
