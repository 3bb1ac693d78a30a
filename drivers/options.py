"""Reading a driver's options: every mistake at once, each with place, got and wanted.

A family reads its options through one ``OptionReader``. A reader never raises: a bad or missing
value is noted and a harmless stand-in returned, so that the rest can still be judged. ``problems``
is what ``check_options`` gives back; paths look like ``yields.left.reply`` and are relative to the
options.
"""

from __future__ import annotations

import difflib
import math
import re
from collections.abc import Callable, Iterable, Mapping
from typing import Any, Final, TypeVar

from drivers.base import SetupError

T = TypeVar("T")
NAME = re.compile(r"[A-Za-z_][A-Za-z0-9_-]*")
"""What a reading may be called: no dots, so that paths stay readable."""
NEVER: Final = "(?!)"
"""Stands in for a regular expression that could not be compiled."""


class OptionReader:
    """One mapping of options; ``done()`` notes keys that nobody asked for."""

    def __init__(self, given: object, problems: list[tuple[str, str]] | None = None, path: str = "") -> None:
        self.problems: list[tuple[str, str]] = [] if problems is None else problems
        self.path = path
        self._known: list[str] = []
        self._given: Mapping[str, Any] = {}
        self._unusable = not isinstance(given, Mapping)
        if not isinstance(given, Mapping):
            self.wrong("", f"got {_show(given)}, need a mapping of keys to values")
        else:
            for key in given:
                if not isinstance(key, str):
                    self.wrong("", f"got the key {_show(key)}, need text (quote it)")
            self._given = {key: value for key, value in given.items() if isinstance(key, str)}

    def place(self, key: str) -> str:
        """The path of ``key``."""
        return f"{self.path}.{key}" if self.path and key else self.path + key

    def wrong(self, key: str, message: str) -> None:
        """Note a mistake at ``key``."""
        self.problems.append((self.place(key), message))

    def has(self, key: str) -> bool:
        """Whether ``key`` was given; asking counts as knowing the key."""
        self._known.append(key)
        return key in self._given

    def raw(self, key: str) -> Any:
        """The value of ``key`` as it was given, or None."""
        self._known.append(key)
        return self._given.get(key)

    @property
    def keys(self) -> list[str]:
        """The keys that were given."""
        return list(self._given)

    def _take(self, key: str, default: T | None, need: str, accept: Callable[[Any], T | None], idle: T) -> T:
        if not self.has(key):
            if default is None and not self._unusable:
                self.wrong(key, f"is missing, need {need}")
            return idle if default is None else default
        value = accept(self._given[key])
        if value is None:
            self.wrong(key, f"got {_show(self._given[key])}, need {need}")
            return idle if default is None else default
        return value

    def text(self, key: str, default: str | None = None, *, most: int = 400, empty: bool = False) -> str:
        """Text of 1 to ``most`` characters (0 with ``empty``)."""

        def accept(value: Any) -> str | None:
            fits = isinstance(value, str) and len(value) <= most and (empty or bool(value))
            return value if fits else None

        return self._take(key, default, "text (quote it where YAML would read a number)", accept, "")

    def choice(self, key: str, among: Iterable[str], default: str | None = None) -> str:
        """One of the given words."""
        words = list(among)
        accept: Callable[[Any], str | None] = lambda v: v if isinstance(v, str) and v in words else None  # noqa: E731
        return self._take(key, default, "one of " + ", ".join(words), accept, words[0])

    def flag(self, key: str, default: bool) -> bool:
        """True or false."""
        accept: Callable[[Any], bool | None] = lambda v: v if isinstance(v, bool) else None  # noqa: E731
        return self._take(key, default, "true or false", accept, default)

    def number(
        self, key: str, default: float | None = None, *, least: float = 0.0, most: float = math.inf
    ) -> float:
        """A finite number between ``least`` and ``most``, both allowed."""
        need = (
            f"a number from {least:g} to {most:g}"
            if math.isfinite(most)
            else f"a number of at least {least:g}"
        )

        def accept(value: Any) -> float | None:
            if isinstance(value, bool) or not isinstance(value, int | float):
                return None
            return float(value) if math.isfinite(value) and least <= value <= most else None

        return self._take(key, default, need, accept, max(least, 0.0))

    def whole(self, key: str, default: int | None = None, *, least: int = 0, most: int = 2**31) -> int:
        """A whole number between ``least`` and ``most``, both allowed."""
        need = f"a whole number from {least} to {most}"

        def accept(value: Any) -> int | None:
            fits = isinstance(value, int) and not isinstance(value, bool) and least <= value <= most
            return value if fits else None

        return self._take(key, default, need, accept, least)

    def pattern(
        self, key: str, default: str | None = None, fill: Callable[[str], str] = str
    ) -> re.Pattern[str]:
        """A regular expression; ``fill`` replaces place-holders before it is compiled."""
        source = self.text(key, default)
        try:
            return re.compile(fill(source), re.ASCII)
        except re.error as error:
            self.wrong(key, f"got {_show(source)}, need a regular expression ({error})")
            return re.compile(NEVER)

    def texts(self, key: str) -> list[str]:
        """A list of texts; absent means empty."""
        accept: Callable[[Any], list[str] | None] = lambda v: (  # noqa: E731
            v if isinstance(v, list) and all(isinstance(x, str) and x for x in v) else None
        )
        return self._take(key, [], 'a list of texts, like ["A", "B"]', accept, [])

    def part(self, key: str) -> OptionReader | None:
        """The mapping below ``key``, or None where it is absent."""
        if not self.has(key):
            return None
        return OptionReader(self._given[key], self.problems, self.place(key))

    def parts(self, key: str, number: str = "", text: str = "") -> dict[str, OptionReader]:
        """The mappings below ``key``, by name, in the order given; at least one.

        A bare whole number stands for the mapping {number: value}, bare text for {text: value}.
        """
        inside = self.part(key)
        if inside is None:
            self.wrong(key, "is missing, need a mapping with at least one entry")
            return {}
        found: dict[str, OptionReader] = {}
        for name, value in inside._given.items():
            if not NAME.fullmatch(name):
                inside.wrong(
                    name, f"got the name {name!r}, need letters, digits, _ and -, beginning with a letter"
                )
            bare = number if type(value) is int else text if isinstance(value, str) else ""
            body = {bare: value} if bare else value
            found[name] = OptionReader(body, self.problems, inside.place(name))
        if not found and isinstance(self._given[key], Mapping):
            self.wrong(key, "got nothing, need at least one entry")
        return found

    def found(self) -> list[tuple[str, str]]:
        """Close the reader and return every mistake once, also one in a default that several share."""
        self.done()
        return list(dict.fromkeys(self.problems))

    def done(self) -> None:
        """Note every key that is not an option."""
        for key in self._given:
            if key not in self._known:
                near = difflib.get_close_matches(key, self._known, n=1)
                hint = f"; did you mean {near[0]}?" if near else ""
                known = ", ".join(sorted(set(self._known)))
                self.wrong(key, f"is no option here{hint} (there are: {known})")


def must_be_fit(problems: list[tuple[str, str]]) -> None:
    """Raise SetupError if there is any problem."""
    if problems:
        raise SetupError(problems)


def _show(value: object) -> str:
    text = repr(value)
    return text if len(text) <= 60 else text[:57] + "..."
