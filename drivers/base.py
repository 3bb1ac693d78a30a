"""The whole contract of a driver, on one page.

A driver speaks to one instrument. The daemon calls, always from the one thread of the
instrument's bus and in this order::

    driver.open()                  # claim the port, or LinkError
    driver.identify()              # who answers? IdentityError if it is not the one meant
    driver.poll(deadline_s)        # as often as wanted; one RawReading for every name in ``yields``
    driver.close()                 # always, in a ``finally``; may be called twice

Every call returns in bounded time, whatever the wire does: ``poll`` within ``deadline_s`` seconds
of the call, the others within a few of the driver's own time-outs. A reading that could not be
had is a RawReading with ``value`` NaN and a ``quality`` that says why; an exception means
that the link (LinkError) or the instrument (InstrumentError) needs the remedy its name tells.
A value is never guessed, carried over from the last poll, or taken from a late reply. ``poll``
without a successful ``identify`` since ``open`` is refused with IdentityError.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Protocol, runtime_checkable


class DriverError(Exception):
    """Root of all driver errors. Messages name place, got and wanted."""


class SetupError(DriverError):
    """The driver's options are wrong (user: fix the settings).

    ``problems`` holds every mistake as (path inside the options, "got ..., need ...").
    """

    def __init__(self, problems: str | Sequence[tuple[str, str]]) -> None:
        self.problems = [("", problems)] if isinstance(problems, str) else list(problems)
        super().__init__("; ".join(f"{path}: {text}" if path else text for path, text in self.problems))


class LinkError(DriverError):
    """The wire failed: port gone, refused, timed out (remedy: close, back off, reopen)."""


class InstrumentError(DriverError):
    """The peer answered, but not what was asked (remedy: resynchronise, ask again)."""


class IdentityError(DriverError):
    """Another instrument than the configured one answered (remedy: a person looks)."""


GOOD = "good"
"""Quality of a number that came as the protocol promises. Others, all with ``value`` NaN:"""
MISSING = "missing"
GARBLED = "garbled"
OVERLOAD = "overload"
NOT_A_NUMBER = "not_a_number"
OPEN_CIRCUIT = "open_circuit"
QUALITIES = frozenset({GOOD, MISSING, GARBLED, OVERLOAD, NOT_A_NUMBER, OPEN_CIRCUIT})


@dataclass(frozen=True, slots=True)
class RawReading:
    """One number as the instrument gave it, in the instrument's own unit."""

    name: str
    value: float
    quality: str = GOOD

    def __post_init__(self) -> None:
        if self.quality not in QUALITIES:
            raise ValueError(
                f"reading {self.name}: got quality {self.quality!r}, wanted one of {sorted(QUALITIES)}"
            )
        if (self.quality == GOOD) != math.isfinite(self.value):
            raise ValueError(
                f"reading {self.name}: got {self.value!r} as {self.quality}; good means finite, else NaN"
            )


def no_reading(name: str, quality: str) -> RawReading:
    """Return the reading that says why there is no number."""
    return RawReading(name, math.nan, quality)


@dataclass(frozen=True, slots=True)
class Identity:
    """What the instrument says it is. ``declared`` means the user stated that it cannot say."""

    text: str
    declared: bool = False


@runtime_checkable
class Driver(Protocol):
    """What every driver is. Construct with ``cls(options)``; bad options raise SetupError.

    ``check_options`` returns every mistake in the options as (path, message), none if they
    are fit; it opens nothing, so that settings can be checked on any machine.
    """

    yields: tuple[str, ...]
    """Names of the readings that each poll returns, in this order."""
    listens: bool
    """True where the instrument talks by itself and poll takes what it has said since."""

    def __init__(self, options: Mapping[str, Any]) -> None: ...
    @classmethod
    def check_options(cls, options: Mapping[str, Any]) -> list[tuple[str, str]]: ...
    def open(self) -> None: ...
    def identify(self) -> Identity: ...
    def poll(self, deadline_s: float) -> list[RawReading]: ...
    def close(self) -> None: ...
