"""A recording played as an instrument."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

import pytest
import yaml

import drivers.recording as module
from drivers.base import DriverError, IdentityError, InstrumentError, LinkError, RawReading
from drivers.recording import Recording
from drivers.scripted import ScriptedClock

CSV = """# a comment
time_s,left,right
100,1.5,2.5
101,1.6,
# another
103,1.7,OL
103,1.8,x
bad line
106,1.9,2.9
"""


def play(text: str, folder: Path, **more: Any) -> tuple[Recording, ScriptedClock]:
    path = folder / "h1.csv"
    path.write_text(text, encoding="utf-8")
    clock = ScriptedClock()
    options: dict[str, Any] = {"file": str(path), "yields": {"left": "left", "right": 3}, **more}
    driver = Recording(options, clock=clock)
    driver.open()
    try:
        driver.identify()
    except DriverError:
        driver.close()
        raise
    return driver, clock


def values(readings: list[RawReading]) -> list[float | str]:
    return [r.value if r.quality == "good" else r.quality for r in readings]


def test_each_poll_gives_the_last_line_whose_time_has_come(tmp_path: Path) -> None:
    """Nothing is given twice, nothing before its time; equal times are data."""
    driver, clock = play(CSV, tmp_path)
    heard = []
    for _ in range(8):
        heard.append(values(driver.poll(0.5)))
        clock.sleep(1.0)
    driver.close()
    missing, garbled = ["missing", "missing"], ["garbled", "garbled"]
    # the damaged line has no time of its own: it is told together with what precedes it
    assert heard == [[1.5, 2.5], [1.6, "missing"], missing, garbled, missing, missing, [1.9, 2.9], missing]


def test_words_and_nonsense_are_qualities(tmp_path: Path) -> None:
    """As from any other instrument."""
    for cell, wanted in (("OL", "overload"), ("x", "garbled"), ("9.91E37", "not_a_number"), ("", "missing")):
        driver, _ = play(f"time_s,left,right\n0,1,{cell}\n", tmp_path)
        assert values(driver.poll(0.5)) == [1.0, wanted]
        driver.close()


def test_speed_start_and_repetition(tmp_path: Path) -> None:
    """Ten times as fast, from the third second on, again and again."""
    text = "time_s,left,right\n" + "".join(f"{t},{t},0\n" for t in range(21))
    driver, clock = play(text, tmp_path, speed=10, from_s=3, at_end="repeat")
    heard = []
    for _ in range(5):
        heard.append(values(driver.poll(0.5))[0])
        clock.sleep(1.0)
    driver.close()
    assert heard == [3.0, 13.0, 20.0, 3.0, 13.0]


def test_iso_times_need_a_zone(tmp_path: Path) -> None:
    """A local time without one is ambiguous twice a year."""
    text = "time,left,right\n2024-05-01T12:00:00+02:00,1,2\n2024-05-01T10:00:05Z,3,4\n"
    driver, clock = play(text, tmp_path)
    assert values(driver.poll(0.5)) == [1.0, 2.0]
    clock.sleep(5.0)
    assert values(driver.poll(0.5)) == [3.0, 4.0]
    driver.close()
    with pytest.raises(InstrumentError, match="line 2: got '2024-05-01T12:00:00', need a time with a zone"):
        play("time,left,right\n2024-05-01T12:00:00,1,2\n", tmp_path)


def test_a_long_gap_is_caught_up_within_the_deadline(tmp_path: Path) -> None:
    """A million lines since the last poll must not hold the bus."""
    text = "time_s,left,right\n" + "".join(f"{t},{t},0\n" for t in range(3000))
    driver, clock = play(text, tmp_path)
    clock.sleep(5000.0)
    sleep = clock.sleep

    class Ticking(ScriptedClock):
        def now_s(self) -> float:
            sleep(0.1)
            return clock.now_s()

    driver._clock = Ticking()
    first = values(driver.poll(0.3))[0]
    assert isinstance(first, float)
    assert 255.0 <= first < 2999.0
    while first < 2999.0:
        first = values(driver.poll(0.3))[0]
    driver.close()


@pytest.mark.parametrize(
    ("text", "error", "match"),
    [
        ("", InstrumentError, "no line with readings"),
        ("# only\n", InstrumentError, "no line with readings"),
        ("time_s,left,right\n", InstrumentError, "no line with readings"),
        ("t,left,right\n1,2,3\n", InstrumentError, "line 1: got the first column 't', need time_s or time"),
        ("time_s,left,right\nx,2,3\n", InstrumentError, "line 2: got 'x', need seconds"),
        ("time_s,left,right\n1,2\n", InstrumentError, "line 2: got 2 fields, need 3"),
        ("time_s,lift,right\n1,2,3\n", IdentityError, "need 'left'"),
        ("time_s,left\n1,2\n", IdentityError, "need 3"),
        ('time_s,left,right\n"1,2,3\n', InstrumentError, "line 2"),
    ],
)
def test_an_unfit_file_is_refused_with_its_line(
    text: str, error: type[Exception], match: str, tmp_path: Path
) -> None:
    """Before the first reading."""
    with pytest.raises(error, match=match):
        play(text, tmp_path)


def test_calls_out_of_order_are_refused_and_nothing_stays_open(tmp_path: Path) -> None:
    """As the contract has it."""
    path = tmp_path / "h1.csv"
    options = {"file": str(path), "yields": {"left": "left"}}
    driver = Recording(options)
    with pytest.raises(LinkError, match="No such file"):
        driver.open()
    path.write_text("time_s,left\n0,1\n")
    with pytest.raises(IdentityError):
        driver.poll(1.0)
    with pytest.raises(LinkError):
        driver.identify()
    before = len(os.listdir("/proc/self/fd")) if Path("/proc/self/fd").exists() else 0
    for _ in range(3):
        driver.open()
        driver.open()
        assert driver.identify().text == "recording h1.csv: left"
        assert values(driver.poll(1.0)) == [1.0]
        driver.close()
        driver.close()
    with pytest.raises(IdentityError):
        driver.poll(1.0)
    assert before == 0 or len(os.listdir("/proc/self/fd")) == before


def test_the_example_of_the_module_is_fit() -> None:
    """Documentation that somebody copies must work."""
    (block,) = [b for b in (module.__doc__ or "").split("\n\n") if b.startswith("    ")]
    options = yaml.safe_load(block)
    assert options.pop("driver") == "recording"
    assert Recording.check_options(options) == []


@pytest.mark.parametrize(
    ("wrong", "place", "need"),
    [
        ({"file": 3}, "file", "text"),
        ({"speed": 0}, "speed", "0.001"),
        ({"at_end": "loop"}, "at_end", "repeat"),
        ({"yields": {"a": 1}}, "yields.a.number", "from 2"),
        ({"yields": {"a": {}}}, "yields.a", "name, or its number"),
        ({"port": "x"}, "port", "no option"),
    ],
)
def test_a_wrong_option_is_named_with_its_place(wrong: dict[str, Any], place: str, need: str) -> None:
    """Place, got, wanted."""
    (problem,) = Recording.check_options({"file": "/x.csv", "yields": {"a": "left"}, **wrong})
    assert problem[0] == place
    assert need in problem[1]
