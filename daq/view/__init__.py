"""The view: the laboratory at a glance in a terminal, read-only, a process of its own."""

from daq.view.model import AlarmRow, Curve, Event, Expected, Snapshot, Source, TestRow, ViewError
from daq.view.watch import watch

__all__ = [
    "AlarmRow",
    "Curve",
    "Event",
    "Expected",
    "Snapshot",
    "Source",
    "TestRow",
    "ViewError",
    "watch",
]
