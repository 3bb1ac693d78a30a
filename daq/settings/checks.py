"""What the places of a lab file have to do with each other, and what must be there at all.

Works on the file as it was read, not on validated models: a misspelt key in one place must not hide a
missing load in another. So everything is asked for carefully, and a value of the wrong kind is left to
whoever judges kinds. Each check notes what it finds in the document, with its place.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from ipaddress import ip_address
from typing import Any, Final
from urllib.parse import urlsplit

from daq.core.rules import Role
from daq.settings.units import UNITS
from daq.yamlmarks import Document, Path, number, show

EMULATED: Final = "emulated"
"""What stands as ``port`` of an instrument that the bench plays."""
ISO204_TO_C: Final = 1100.0
ROLES: Final = tuple(role.value for role in Role)
STRAIN_ROLES: Final = ("strain", "extension")
TEMPERATURE_ROLES: Final = ("specimen_temperature", "room_temperature", "cold_junction", "set_point")
LOAD_KEYS: Final = ("stress_mpa", "mass_kg", "lever_ratio")
TLS_KEYS: Final = ("ca_file", "cert_file", "key_file")
SECTION_KEYS: Final = ("diameter_mm", "area_mm2", "width_mm", "thickness_mm")


@dataclass(frozen=True, slots=True)
class TestPlace:
    """One test of the file: its place and mapping, and its frame's (the same for a single specimen)."""

    __test__ = False

    path: Path
    own: Mapping[str, Any]
    frame_path: Path
    frame: Mapping[str, Any]

    def find(self, key: str) -> tuple[Path, Any]:
        """Return the place and value that hold for this test: its own, else its frame's, else None."""
        if key in self.own or self.own is self.frame:
            return (*self.path, key), self.own.get(key)
        return (*self.frame_path, key), self.frame.get(key)


def check(document: Document) -> None:
    """Note every mistake of relation and every missing key of the tests in ``document``."""
    tree = document.tree
    if not isinstance(tree, Mapping):
        return
    _broker(document, mapping(tree.get("broker")))
    _bench(document, tree)
    for name, frame in mapping(tree.get("frames")).items():
        path: Path = ("frames", name)
        if name == "host":
            document.problem(
                path, "got 'host', wanted another name (host is the program itself)", at_key=True
            )
        if isinstance(frame, Mapping):
            for place in tests_of(path, frame):
                _test(document, place)
            _frame(document, path, frame)


def tests_of(path: Path, frame: Mapping[str, Any]) -> Iterator[TestPlace]:
    """Yield the tests of a frame: one for each position, or the frame itself."""
    if "positions" not in frame:
        yield TestPlace(path, frame, path, frame)
    for name, position in mapping(frame.get("positions")).items():
        if isinstance(position, Mapping):
            yield TestPlace((*path, "positions", name), position, path, frame)


def mapping(value: object) -> Mapping[str, Any]:
    """Return ``value`` if it is a mapping, else an empty one."""
    return value if isinstance(value, Mapping) else {}


def near(word: str, among: Iterable[str]) -> str:
    """Return a hint at the most similar word, or nothing."""
    words = list(among)
    folded = {w.casefold(): w for w in words}
    found = difflib.get_close_matches(word.casefold(), folded, n=1, cutoff=0.6)
    return f"; did you mean {folded[found[0]]}?" if found else ""


# --- frames and tests -----------------------------------------------------------------------


def _frame(document: Document, path: Path, frame: Mapping[str, Any]) -> None:
    shared = mapping(frame.get("channels"))
    positions = mapping(frame.get("positions"))
    if positions and "specimen" in frame:
        document.problem((*path, "specimen"), "got a specimen beside positions, wanted one in each position")
    for position, own in positions.items():
        for name in mapping(mapping(own).get("channels")):
            if name in shared:
                here = (*path, "positions", position, "channels", name)
                document.problem(here, f"got {name!r}, which the frame shares already, wanted another name")


def _test(document: Document, test: TestPlace) -> None:
    for key, wanted in (
        ("specimen", "the specimen: {id: ..., extensometer_length_mm: ...}"),
        ("temperature_c", "the specified temperature"),
        ("tolerance", "iso204, astm_e139 or {below_c: 3, above_c: 3}"),
    ):
        if key not in test.own and (key == "specimen" or key not in test.frame):
            document.problem((*test.path, key), f"got nothing, wanted {wanted}")
    _load(document, test)
    path, tolerance = test.find("tolerance")
    set_point = number(test.find("temperature_c")[1])
    if tolerance == "iso204" and set_point is not None and set_point > ISO204_TO_C:
        document.problem(
            path,
            f"got iso204, which gives no band above {ISO204_TO_C:g} degC, wanted {{below_c: , above_c: }}",
        )
    channels: dict[str, tuple[Path, Any]] = {}
    for where, owner in ((test.frame_path, test.frame), (test.path, test.own)):
        for name, channel in mapping(owner.get("channels")).items():
            channels[name] = ((*where, "channels", name), channel)
    if not channels:
        document.problem((*test.path, "channels"), "got nothing, wanted at least one channel")
    _channels(document, test, channels)
    path, starts = test.find("starts")
    if starts == "load_channel":
        if not any(_role(c) == "force" for _, c in channels.values()):
            document.problem(path, "got load_channel, wanted a channel with role force beside it")
        elif not any(key in mapping(test.own.get("specimen")) for key in SECTION_KEYS):
            document.problem(path, "got load_channel, wanted the specimen's section to make force of stress")


def _load(document: Document, test: TestPlace) -> None:
    by_own = any(key in test.own for key in LOAD_KEYS)
    owner, where = (test.own, test.path) if by_own else (test.frame, test.frame_path)
    given = [key for key in LOAD_KEYS if key in owner]
    wanted = "stress_mpa, or mass_kg with lever_ratio"
    if not given:
        document.problem((*test.path, "stress_mpa"), f"got no load, wanted {wanted}")
    elif "stress_mpa" in given and len(given) > 1:
        document.problem(
            (*where, given[1]), f"got {given[1]} beside stress_mpa, wanted {wanted}", at_key=True
        )
    elif given == ["mass_kg"]:
        document.problem((*where, "mass_kg"), "got no lever_ratio, wanted one (1 for a mass hung directly)")
    elif given == ["lever_ratio"]:
        document.problem((*where, "lever_ratio"), "got no mass_kg, wanted one")
    specimen = mapping(test.own.get("specimen"))
    section = [key for key in SECTION_KEYS if key in specimen]
    if "mass_kg" in given and "stress_mpa" not in given and specimen and not section:
        document.problem(
            (*test.path, "specimen"),
            "got no section, wanted diameter_mm or area_mm2 to make stress of mass_kg",
        )
    lone = set(section) in ({"width_mm"}, {"thickness_mm"})
    if lone or (len(section) > 1 and set(section) != {"width_mm", "thickness_mm"}):
        document.problem(
            (*test.path, "specimen", section[-1]),
            f"got {' and '.join(section)}, wanted diameter_mm, area_mm2, or width_mm and thickness_mm",
            at_key=True,
        )


# --- channels -------------------------------------------------------------------------------


def _role(channel: object) -> str:
    role = mapping(channel).get("role")
    return str(role) if isinstance(role, str) else ""


def _channels(document: Document, test: TestPlace, channels: Mapping[str, tuple[Path, Any]]) -> None:
    taken: dict[tuple[str, str], str] = {}
    specimen = mapping(test.own.get("specimen"))
    for name, (path, channel) in channels.items():
        c, role = mapping(channel), _role(channel)
        if role in STRAIN_ROLES:
            seat = (str(c.get("side", "A")), str(c.get("rank", "0")))
            if seat in taken:
                document.problem(
                    path,
                    f"got side {seat[0]}, rank {seat[1]}, as has {taken[seat]}; wanted another side or rank",
                    at_key=True,
                )
            taken.setdefault(seat, name)
        elif role in ROLES:
            for key in ("side", "travel_mm"):
                if key in c:
                    document.problem(
                        (*path, key), f"got it with role {role}, wanted it with strain or extension only",
                        at_key=True,
                    )  # fmt: skip
        if role == "extension" and specimen and "extensometer_length_mm" not in specimen:
            document.problem(
                (*test.path, "specimen", "extensometer_length_mm"),
                f"got nothing, wanted the reference length, to make strain of channel {name}",
            )
        low, high = number(c.get("low")), number(c.get("high"))
        if low is not None and high is not None and low >= high:
            document.problem((*path, "high"), f"got {high:g}, wanted more than low ({low:g})")
        unit = c.get("unit")
        if isinstance(unit, str) and role in UNITS and unit not in UNITS[role]:
            document.problem(
                (*path, "unit"), f"got {show(unit)}, wanted {' or '.join(UNITS[role])} with role {role}"
            )
        _conversion(document, (*path, "conversion"), role, mapping(c.get("conversion")), channels)


def _conversion(
    document: Document,
    path: Path,
    role: str,
    v: Mapping[str, Any],
    channels: Mapping[str, tuple[Path, Any]],
) -> None:
    couple, platinum = "thermocouple" in v, v.get("pt100") == "true"
    sensor = "thermocouple" if couple else "pt100"
    if couple and platinum:
        document.problem((*path, "pt100"), "got pt100 beside thermocouple, wanted one of them", at_key=True)
    if (couple or platinum) and role in ROLES and role not in (*TEMPERATURE_ROLES, "other"):
        document.problem((*path, sensor), f"got it with role {role}, wanted a temperature", at_key=True)
    if couple and "cold_junction" not in v:
        document.problem(
            (*path, "thermocouple"),
            "got no cold_junction, wanted by_instrument, {fixed_c: 25} or {channel: NAME}",
        )
    if "cold_junction" in v and not couple:
        document.problem((*path, "cold_junction"), "got it without thermocouple", at_key=True)
    raw = v.get("raw_unit")
    if isinstance(raw, str):
        fits = ("V", "mV", "uV") if couple else ("ohm", "kohm") if platinum else ()
        if raw not in fits:
            wanted = (
                " or ".join(fits) + f" with {sensor}"
                if fits
                else "thermocouple or pt100 beside it (else scale)"
            )
            document.problem((*path, "raw_unit"), f"got {show(raw)}, wanted {wanted}")
    if number(v.get("scale")) == 0.0:
        document.problem((*path, "scale"), "got 0, wanted another number")
    points = v.get("points")
    raws = [number(p[0]) for p in points if isinstance(p, list) and p] if isinstance(points, list) else []
    for i in range(1, len(raws)):
        a, b = raws[i - 1], raws[i]
        if a is not None and b is not None and b <= a:
            document.problem((*path, "points", i), f"got raw {b:g} after {a:g}, wanted rising raw values")
    junction = v.get("cold_junction")
    if isinstance(junction, Mapping):
        _junction(document, (*path, "cold_junction"), path[-2], junction, channels)


def _junction(
    document: Document,
    path: Path,
    of: str | int,
    junction: Mapping[str, Any],
    channels: Mapping[str, tuple[Path, Any]],
) -> None:
    if ("channel" in junction) == ("fixed_c" in junction):
        document.problem(path, "got both or neither, wanted either fixed_c or channel", at_key=True)
    name = junction.get("channel")
    if not isinstance(name, str):
        return
    here = (*path, "channel")
    found = channels.get(name)
    if found is None or name == of:
        document.problem(here, f"got {name!r}, wanted another channel of this test{near(name, channels)}")
    elif _role(found[1]) not in TEMPERATURE_ROLES:
        document.problem(here, f"got {name!r} with role {_role(found[1])}, wanted a temperature")
    elif "channel" in mapping(mapping(mapping(found[1]).get("conversion")).get("cold_junction")):
        document.problem(here, f"got {name!r}, which needs a cold junction channel itself, wanted another")


# --- broker and bench -----------------------------------------------------------------------


def _broker(document: Document, broker: Mapping[str, Any]) -> None:
    url = broker.get("url")
    if not isinstance(url, str):
        return
    try:
        parts = urlsplit(url)
        host, port, plain = parts.hostname or "", parts.port, parts.scheme == "mqtt"
    except ValueError:
        document.problem(("broker", "url"), f"got {show(url)}, wanted a port from 1 to 65535")
        return
    local = is_loopback(host)
    if port == 0:
        document.problem(("broker", "url"), f"got {show(url)}, wanted a port from 1 to 65535")
    if plain and not local:
        document.problem(
            ("broker", "url"),
            f"got mqtt:// for {host}, wanted mqtts:// (plain only for this machine: 127.0.0.1)",
        )
    if broker.get("embedded") == "true":
        if not local or not plain:
            document.problem(
                ("broker", "url"), f"got {url} for the embedded broker, wanted mqtt://127.0.0.1:PORT"
            )
        for key in ("user", "password_file", *TLS_KEYS):
            if key in broker:
                document.problem(
                    ("broker", key), "got it with embedded, wanted a broker of its own", at_key=True
                )
    elif "password_file" in broker and "user" not in broker:
        document.problem(("broker", "password_file"), "got no user, wanted one beside it", at_key=True)
    for key in TLS_KEYS:
        if plain and key in broker:
            document.problem(("broker", key), "got it with mqtt://, wanted mqtts://", at_key=True)
    if "key_file" in broker and "cert_file" not in broker:
        document.problem(("broker", "key_file"), "got no cert_file, wanted one beside it", at_key=True)


def is_loopback(host: str) -> bool:
    """Whether ``host`` is this machine."""
    try:
        return ip_address(host).is_loopback
    except ValueError:
        return host == "localhost"


def _bench(document: Document, tree: Mapping[str, Any]) -> None:
    instruments = mapping(tree.get("instruments"))
    played = [name for name, i in instruments.items() if mapping(i).get("port") == EMULATED]
    real = [name for name in instruments if name not in played]
    bench = tree.get("bench")
    if bench is None:
        for name in played:
            document.problem(("instruments", name, "port"), "got emulated, wanted a section bench to play it")
        return
    speed = number(mapping(bench).get("speed"))
    if speed not in (None, 1.0) and real:
        document.problem(
            ("bench", "speed"),
            f"got {speed:g} beside {', '.join(real)} with a real port, wanted 1 (those keep their own time)",
        )
    parts = mapping(mapping(bench).get("instruments"))
    for name in played:
        if name not in parts:
            hint = f"wanted bench.instruments.{name}{near(name, parts)}"
            document.problem(("instruments", name, "port"), f"got emulated, {hint}")
    for name in parts:
        if name not in played:
            wanted = f"wanted an instrument of that name with port: emulated{near(name, played)}"
            document.problem(("bench", "instruments", name), f"got {name!r}, {wanted}", at_key=True)
    if not played:
        document.problem(("bench",), "got no instrument with port: emulated, wanted one to play", at_key=True)
