"""From a driver's name in the settings to its class.

Our own families stand in a table and are imported only when used; drivers of others are found
through the entry-point group ``upturn.drivers``. In the other package's pyproject.toml::

    [project.entry-points."upturn.drivers"]
    mygauge = "mypackage:MyGauge"
"""

from __future__ import annotations

import importlib
from collections.abc import Mapping
from importlib.metadata import EntryPoint, entry_points
from typing import Any, Final

from drivers.base import Driver, SetupError

GROUP: Final = "upturn.drivers"
FAMILIES: Final[Mapping[str, str]] = {
    "modbus": "drivers.modbus:Modbus",
    "numberfile": "drivers.numberfile:NumberFile",
    "recording": "drivers.recording:Recording",
    "scpi": "drivers.scpi:Scpi",
    "textline": "drivers.textline:TextLine",
}
EXTRAS: Final[Mapping[str, str]] = {}
"""Family -> the extra of this distribution that brings what it needs."""


def names() -> list[str]:
    """All driver names that may stand in the settings."""
    return sorted({*FAMILIES, *(point.name for point in _outside())})


def driver_class(name: str) -> type[Driver]:
    """Return the class; SetupError if there is none of that name or it cannot be imported."""
    if name in FAMILIES:
        module, _, attribute = FAMILIES[name].partition(":")
        try:
            found: type[Driver] = getattr(importlib.import_module(module), attribute)
        except ImportError as error:
            extra = EXTRAS.get(name)
            remedy = f"; install upturn[{extra}]" if extra else ""
            raise SetupError([("driver", f"{name} cannot be loaded: {error}{remedy}")]) from error
        return found
    points = [point for point in _outside() if point.name == name]
    if not points:
        raise SetupError([("driver", f"got {name!r}, need one of {', '.join(names())}")])
    if len({point.value for point in points}) > 1:
        several = ", ".join(sorted(point.value for point in points))
        raise SetupError([("driver", f"got {name!r}, which several packages offer: {several}")])
    try:
        loaded = points[0].load()
    except Exception as error:  # whatever an outside module does while it is imported
        raise SetupError([("driver", f"{name} ({points[0].value}) cannot be loaded: {error!r}")]) from error
    missing = [m for m in ("check_options", "open", "identify", "poll", "close") if not hasattr(loaded, m)]
    if missing:
        raise SetupError([("driver", f"{name} ({points[0].value}) lacks {', '.join(missing)}")])
    outside: type[Driver] = loaded
    return outside


def check_options(name: str, options: Mapping[str, Any]) -> list[tuple[str, str]]:
    """Return every mistake as (path, message): the name's own, or those in the options."""
    try:
        return driver_class(name).check_options(options)
    except SetupError as error:
        return error.problems


def create(name: str, options: Mapping[str, Any]) -> Driver:
    """Make a driver (nothing is opened); SetupError holds every mistake."""
    return driver_class(name)(options)


def _outside() -> list[EntryPoint]:
    return list(entry_points(group=GROUP))
