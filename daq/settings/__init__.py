"""The lab file of one host: from YAML to frozen settings, or every mistake at once.

``load`` reads a file; ``must_be_ready`` asks what only the live house needs (instruments, sources, secrets).
Relative paths in the file (``journal``, ``password_file``, ``ca_file``) start at the folder of the file,
so that a command finds the same journal from wherever it is called.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any, Final

from pydantic import ValidationError

from daq.records import UpturnError
from daq.settings import model, say
from daq.settings.build import NOT_OPTIONS, build
from daq.settings.checks import EMULATED, check, mapping, near
from daq.settings.lab import Bench, Frame, Instrument, Lab
from daq.yamlmarks import Document, Problem, read, resolve
from daq.yamlmarks import Path as Place
from drivers import registry

__all__ = [
    "Bench", "Frame", "Instrument", "Lab", "Problem", "SettingsError",
    "load", "loads", "must_be_ready", "ready_to_run",
]  # fmt: skip

A_PORT: Final = "/dev/emulated"
"""Stands for the port that the bench will give while a driver's options are judged."""


class SettingsError(UpturnError):
    """A lab file is wrong: every mistake, one line each, ``file:line:col: path: message``."""

    def __init__(self, file: Path | str, problems: Iterable[Problem]) -> None:
        self.file = str(file)
        self.problems = tuple(sorted(set(problems)))
        super().__init__("\n".join(p.say(self.file) for p in self.problems))


def load(path: Path | str) -> Lab:
    """Return the settings in the file ``path``.

    Raises:
        SettingsError: the file cannot be read, or holds mistakes; all of them are named.
    """
    path = Path(path)
    try:
        text = path.read_text(encoding="utf-8-sig")
    except OSError as error:
        raise SettingsError(path, [Problem(0, 0, "", f"got {error.strerror}, wanted a lab file")]) from error
    except UnicodeDecodeError as error:
        line = error.object.count(b"\n", 0, error.start) + 1
        column = error.start - error.object.rfind(b"\n", 0, error.start)
        what = f"got byte 0x{error.object[error.start]:02X}, wanted UTF-8"
        raise SettingsError(path, [Problem(line, column, "", what)]) from error
    return loads(text, path)


def loads(text: str, path: Path | str) -> Lab:
    """Return the settings in ``text``, taken as the content of ``path`` (which need not exist).

    Raises:
        SettingsError: as ``load``.
    """
    path = Path(path)
    document, file = _judge(text)
    if document.problems or file is None:
        raise SettingsError(path, _once(document.problems))
    return build(file, document.tree, path, text)


def ready_to_run(lab: Lab) -> list[Problem]:
    """Return what is missing before ``lab`` can be watched live; a replay needs none of it."""
    document = read(lab.text)
    if not lab.instruments:
        document.problem(("instruments",), "got nothing, wanted the instruments to read")
    for frame in lab.frames:
        for column in frame.columns:
            if column not in frame.sources:
                position, _, channel = column.rpartition("/")
                inside = ("positions", position) if position else ()
                place = ("frames", frame.name, *inside, "channels", channel, "source")
                document.problem(place, "got nothing, wanted INSTRUMENT.READING to run")
    if lab.broker is not None:
        for key in ("password_file", "ca_file", "cert_file", "key_file"):
            file: Path | None = getattr(lab.broker, key)
            if file is not None and (trouble := _file_trouble(key, file)):
                document.problem(("broker", key), trouble)
    return sorted(document.problems)


def must_be_ready(lab: Lab) -> None:
    """Raise SettingsError with everything that ``ready_to_run`` finds."""
    problems = ready_to_run(lab)
    if problems:
        raise SettingsError(lab.path, problems)


def _file_trouble(key: str, file: Path) -> str:
    from daq.publish.access import PublishError, check_private, read_secret

    try:
        if key == "password_file":
            read_secret(file)
        elif key == "key_file":
            check_private(file)
        else:
            file.read_bytes()
    except PublishError as error:
        return str(error)
    except OSError as error:
        return f"{file}: got {error.strerror}, wanted a readable file"
    return ""


def _judge(text: str) -> tuple[Document, model.LabFile | None]:
    """Read and judge; the file's model is None where its shape is wrong."""
    document = read(text)
    tree = document.tree
    if tree is None:
        return document, None
    if not isinstance(tree, Mapping):
        document.problem((), "got no keys, wanted site, journal, frames and others")
        return document, None
    file = None
    try:
        file = model.LabFile.model_validate(tree)
    except ValidationError as error:
        say.note(document, error, model.LabFile)
    check(document)
    _sources(document, tree, _drivers(document, tree))
    return document, file


def _once(problems: list[Problem]) -> list[Problem]:
    """Only the first complaint about each place: the later ones follow from it."""
    first: dict[tuple[int, str], Problem] = {}
    for p in problems:
        first.setdefault((p.line, p.path), p)
    return list(first.values())


def _drivers(document: Document, tree: Mapping[str, Any]) -> dict[str, list[str] | None]:
    """Let each driver judge its options; return the readings of each instrument, None where unknown."""
    yields: dict[str, list[str] | None] = {}
    for name, given in mapping(tree.get("instruments")).items():
        yields[name] = None
        own = mapping(given)
        driver = own.get("driver")
        if not isinstance(driver, str):
            continue
        options = {key: value for key, value in resolve(own).items() if key not in NOT_OPTIONS}
        if options.get("port") == EMULATED:
            options["port"] = A_PORT
        place: Place = ("instruments", name)
        # ours first: the names of others are looked for in every installed package
        if driver not in registry.FAMILIES and driver not in (drivers := registry.names()):
            wanted = f"one of {', '.join(drivers)}{near(driver, drivers)}"
            document.problem((*place, "driver"), f"got {driver!r}, wanted {wanted}")
            continue
        try:
            found = registry.check_options(driver, options)
            if not found:
                yields[name] = list(registry.create(driver, options).yields)
        except Exception as error:  # whatever an outside driver does
            document.problem((*place, "driver"), f"driver {driver} failed on its options: {error!r}")
            continue
        for where, message in found:
            inside = _place_in(own, where)
            document.problem((*place, *inside), message, at_key=not isinstance(given, str))
    return yields


def _place_in(tree: object, path: str) -> Place:
    """Return the place that a driver's dotted path names; keys may hold dots themselves."""
    if not path:
        return ()
    if isinstance(tree, list) and path.startswith("["):
        index, _, rest = path[1:].partition("]")
        if index.isdigit() and int(index) < len(tree):
            return (int(index), *_place_in(tree[int(index)], rest.removeprefix(".")))
    keys = [k for k in mapping(tree) if path == k or path.startswith((f"{k}.", f"{k}["))]
    if not keys:
        return (path,)
    key = max(keys, key=len)
    return (key, *_place_in(mapping(tree)[key], path[len(key) :].removeprefix(".")))


def _sources(document: Document, tree: Mapping[str, Any], yields: Mapping[str, list[str] | None]) -> None:
    """Every ``source`` names a reading that some instrument gives."""
    for frame_name, frame in mapping(tree.get("frames")).items():
        owners: list[tuple[Place, object]] = [(("frames", frame_name), frame)]
        for name, position in mapping(mapping(frame).get("positions")).items():
            owners.append((("frames", frame_name, "positions", name), position))
        for path, owner in owners:
            for name, channel in mapping(mapping(owner).get("channels")).items():
                source = mapping(channel).get("source")
                if isinstance(source, str) and "." in source:
                    _source(document, (*path, "channels", name, "source"), source, yields)


def _source(document: Document, place: Place, source: str, yields: Mapping[str, list[str] | None]) -> None:
    instrument, _, reading = source.partition(".")
    if instrument not in yields:
        among = ", ".join(yields) or "none, the file has no instruments"
        document.problem(
            place, f"got instrument {instrument!r}, wanted one of {among}{near(instrument, yields)}"
        )
        return
    readings = yields[instrument]
    if readings is not None and reading not in readings:
        among = ", ".join(readings)
        document.problem(place, f"got reading {reading!r}, wanted one of {among}{near(reading, readings)}")
