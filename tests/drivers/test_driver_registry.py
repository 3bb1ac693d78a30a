"""Names to classes, options to mistakes, and an outside driver found by its entry point."""

from __future__ import annotations

import sys
from importlib.metadata import EntryPoint
from pathlib import Path

import pytest

from drivers import registry
from drivers.base import GOOD, Driver, Identity, RawReading, SetupError, no_reading
from drivers.options import OptionReader


@pytest.mark.parametrize("name", registry.FAMILIES)
def test_every_family_in_the_table_is_there_and_is_a_driver(name: str) -> None:
    """A typing error in the table would show only at the customer's."""
    found = registry.driver_class(name)
    for method in ("check_options", "open", "identify", "poll", "close"):
        assert callable(getattr(found, method))
    assert found.check_options({}), "an empty mapping is never enough"
    assert (sys.modules[found.__module__].__doc__ or "").count("::") >= 1, "options are shown by example"


@pytest.mark.parametrize("name", registry.FAMILIES)
@pytest.mark.parametrize(
    "options", [{}, {"yields": 3}, {"yields": {}}, {3: 4}, [], None, {"port": ["x"], "yields": {"a": None}}]
)
def test_wrong_options_are_listed_and_never_crash(name: str, options: object) -> None:
    """Whatever YAML can hold may stand there."""
    problems = registry.check_options(name, options)  # type: ignore[arg-type]
    assert problems
    assert all(isinstance(path, str) and isinstance(text, str) and text for path, text in problems)
    with pytest.raises(SetupError) as caught:
        registry.create(name, options)  # type: ignore[arg-type]
    assert caught.value.problems == problems


def test_an_unknown_name_gets_the_names_that_there_are() -> None:
    """Place, got, wanted."""
    with pytest.raises(SetupError, match=r"driver: got 'skpi', need one of .*scpi.*textline"):
        registry.create("skpi", {})
    assert registry.check_options("skpi", {})[0][0] == "driver"


def test_a_family_whose_library_is_missing_names_the_extra(monkeypatch: pytest.MonkeyPatch) -> None:
    """The remedy is one command."""
    monkeypatch.setitem(registry.FAMILIES, "far", "drivers.not_there:Far")  # type: ignore[arg-type]
    monkeypatch.setitem(registry.EXTRAS, "far", "far")  # type: ignore[arg-type]
    with pytest.raises(SetupError, match=r"far cannot be loaded.*install upturn\[far\]"):
        registry.create("far", {})


# --------------------------------------------------------------------------- outside drivers

OUTSIDE = """
from drivers.base import Identity, RawReading, SetupError

class Clockwork:
    yields = ("turns",)
    listens = False
    def __init__(self, options):
        if self.check_options(options):
            raise SetupError(self.check_options(options))
    @classmethod
    def check_options(cls, options):
        return [] if "spring" in options else [("spring", "is missing, need one")]
    def open(self): pass
    def identify(self): return Identity("clockwork")
    def poll(self, deadline_s): return [RawReading("turns", 3.0)]
    def close(self): pass

class Half:
    yields = ()
"""


@pytest.fixture
def outside(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """An installed package with two entry points, as pip would leave it."""
    (tmp_path / "clockwork_upturn.py").write_text(OUTSIDE)
    info = tmp_path / "clockwork_upturn-1.0.dist-info"
    info.mkdir()
    (info / "METADATA").write_text("Metadata-Version: 2.1\nName: clockwork-upturn\nVersion: 1.0\n")
    (info / "entry_points.txt").write_text(
        "[upturn.drivers]\nclockwork = clockwork_upturn:Clockwork\nhalf = clockwork_upturn:Half\n"
        "broken = clockwork_upturn:Missing\n"
    )
    monkeypatch.syspath_prepend(tmp_path)


@pytest.mark.usefixtures("outside")
def test_an_installed_outside_driver_is_found_and_used() -> None:
    """One entry point is all that it takes."""
    assert "clockwork" in registry.names()
    assert registry.check_options("clockwork", {}) == [("spring", "is missing, need one")]
    driver = registry.create("clockwork", {"spring": 1})
    assert isinstance(driver, Driver)
    assert driver.poll(1.0) == [RawReading("turns", 3.0)]


@pytest.mark.usefixtures("outside")
@pytest.mark.parametrize(("name", "why"), [("half", "lacks check_options"), ("broken", "cannot be loaded")])
def test_an_outside_driver_that_is_none_is_refused_with_its_reason(name: str, why: str) -> None:
    """Somebody else's mistake must not end the daemon."""
    with pytest.raises(SetupError, match=why):
        registry.create(name, {})


def test_a_name_that_two_packages_offer_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    """Which of them is meant, only the user knows."""
    points = [EntryPoint("gauge", f"maker{i}:Gauge", registry.GROUP) for i in (1, 2)]
    monkeypatch.setattr(registry, "entry_points", lambda group: points)
    with pytest.raises(SetupError, match="maker1:Gauge, maker2:Gauge"):
        registry.create("gauge", {})


# ---------------------------------------------------------------------------- records, options


def test_a_reading_is_good_exactly_if_it_is_finite() -> None:
    """NaN must not be able to pass for a number, nor a number for a failure."""
    assert RawReading("a", 1.0).quality == GOOD
    for value, quality in [(float("nan"), GOOD), (float("inf"), GOOD), (1.0, "missing"), (1.0, "fine")]:
        with pytest.raises(ValueError, match="reading a"):
            RawReading("a", value, quality)
    assert no_reading("a", "overload").quality == "overload"
    assert not Identity("x").declared


def test_a_setup_error_tells_every_mistake() -> None:
    """As text for a person, as a list for the settings."""
    error = SetupError([("port", "got 1"), ("yields.a", "got 2")])
    assert str(error) == "port: got 1; yields.a: got 2"
    assert SetupError("all wrong").problems == [("", "all wrong")]


def test_options_report_all_mistakes_with_their_place() -> None:
    """One run of the check is enough."""
    options = OptionReader(
        {
            "a": "x",
            "b": True,
            "c": 99,
            "d": "red",
            "e": "(",
            "f": [1],
            "g": {"h": -1},
            "wrod": 1,
            "i": float("nan"),
        }
    )
    options.number("a")
    options.number("b", 1.0)
    options.whole("c", least=1, most=9)
    options.choice("d", ["blue", "green"])
    options.pattern("e")
    options.texts("f")
    inside = options.part("g")
    assert inside is not None
    inside.number("h", least=0.0)
    options.number("i", 0.0)
    options.text("missing")
    options.text("word", "fine")
    problems = dict(options.found())
    assert list(problems) == ["a", "b", "c", "d", "e", "f", "g.h", "i", "missing", "wrod"]
    assert problems["c"] == "got 99, need a whole number from 1 to 9"
    assert problems["d"] == "got 'red', need one of blue, green"
    assert "did you mean word?" in problems["wrod"]


def test_a_default_is_not_taken_for_a_value_of_the_wrong_type() -> None:
    """0 and false are values too."""
    options = OptionReader({"flag": False, "zero": 0})
    assert options.flag("flag", True) is False
    assert options.number("zero", 5.0) == 0.0
    assert options.found() == []
