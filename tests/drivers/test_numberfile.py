"""Numbers as files: what is read out of them, and files that do not come back."""

from __future__ import annotations

import math
import random
import threading
import time
from collections import defaultdict
from collections.abc import Collection
from pathlib import Path
from typing import Any

import pytest
import yaml

import drivers.numberfile as module
from drivers.base import IdentityError, LinkError
from drivers.checks import check_driver
from drivers.numberfile import NumberFile
from drivers.registry import create

# what the kernel's w1_therm driver shows for a sensor at 23.125 degC (from memory)
W1_GOOD = "72 01 4b 46 7f ff 0e 10 57 : crc=57 YES\n72 01 4b 46 7f ff 0e 10 57 t=23125\n"
W1_BAD = W1_GOOD.replace("YES", "NO")
W1: dict[str, Any] = {
    "pattern": r".*crc=.. YES\n.* t=(?P<value>-?[0-9]+)\n", "scale": 0.001,
    "no_reading": {85000: "not_a_number"},
}  # fmt: skip


def read(content: str, folder: Path, **source: Any) -> tuple[float, str]:
    path = folder / "number"
    path.write_text(content, encoding="latin-1")
    options = {"identity": {"declared": "a file"}, "yields": {"a": {"file": str(path), **source}}}
    driver = create("numberfile", options)
    driver.open()
    driver.identify()
    (reading,) = driver.poll(2.0)
    driver.close()
    return reading.value, reading.quality


@pytest.mark.parametrize(
    ("content", "source", "wanted"),
    [
        ("23125\n", {"scale": 0.001}, 23.125),
        (" -40 \n", {}, -40.0),
        (W1_GOOD, W1, 23.125),
        (W1_BAD, W1, "garbled"),
        (W1_GOOD.replace("t=23125", "t=85000"), W1, "not_a_number"),
        ("", {}, "garbled"),
        ("12 13", {}, "garbled"),
        ("nan\n", {}, "not_a_number"),
        ("\xff", {}, "garbled"),
        ("1" * 5000, {}, "garbled"),
    ],
)
def test_a_file_is_one_number_or_none(
    content: str, source: dict[str, Any], wanted: float | str, tmp_path: Path
) -> None:
    """The pattern must fit the whole file; a 1-wire checksum that failed is no number."""
    value, quality = read(content, tmp_path, **source)
    if isinstance(wanted, str):
        assert quality == wanted
    else:
        assert (quality, value) == ("good", pytest.approx(wanted, rel=1e-12))


class FilePeer:
    """Files that count: each reading of one gives a new number."""

    can = frozenset({"well", "silent", "late", "garbled", "cut", "no_number", "stranger", "gone"})

    def __init__(self) -> None:
        self.how = "well"
        self._rng = random.Random(1)
        self._n = 0
        self._owed: dict[str, list[float]] = defaultdict(list)
        self._release = threading.Event()
        self._lock = threading.Lock()

    def behave(self, how: str) -> None:
        self.how = how
        self._release.set()
        self._release = threading.Event()

    def begin_poll(self) -> None:
        with self._lock:
            self._owed.clear()

    def owed(self, name: str) -> Collection[float]:
        with self._lock:
            return list(self._owed[name])

    def read(self, path: str) -> bytes:
        how, release = self.how, self._release
        if path == "/who":
            if how == "gone":
                raise OSError(2, "No such file or directory")
            return b"other\n" if how == "stranger" else b"28-0316\n"
        with self._lock:
            self._n += 1
            text = f"{self._n}.25\n".encode()
            self._owed[path.strip("/")].append(float(text))
        if how == "silent":
            release.wait(30.0)
        elif how == "late":
            time.sleep(0.25)
        elif how == "gone":
            raise OSError(5, "Input/output error")
        return {"garbled": b"\xff\xfe", "cut": b"", "no_number": b"nan"}.get(how, text)


OPTIONS = {"identity": {"file": "/who", "text": "28-.*"}, "yields": {"a": "/a", "b": {"file": "/b"}}}


def test_the_contract_is_kept() -> None:
    """Files that hang, come late, vanish or hold nonsense."""
    peer = FilePeer()
    check_driver(
        lambda: NumberFile(OPTIONS, read=peer.read), peer, deadline_s=0.15, polls=2, slack_s=0.5, pause_s=0.01
    )


def test_a_file_that_hangs_holds_nobody_and_only_one_thread() -> None:
    """Reading cannot be called off: a dead 1-wire bus must not gather a thread a poll."""
    peer = FilePeer()
    before = threading.active_count()
    release = threading.Event()

    def read(path: str) -> bytes:
        if path == "/a":
            release.wait(30.0)
        return peer.read(path)

    driver = NumberFile(OPTIONS, read=read)
    driver.open()
    driver.identify()
    for _ in range(5):
        started_s = time.monotonic()
        assert [r.quality for r in driver.poll(0.03)] == ["missing", "good"]
        assert time.monotonic() - started_s < 0.5
    assert threading.active_count() <= before + 2
    release.set()
    for _ in range(100):  # what came back late is thrown away; then all is well
        if [r.quality for r in driver.poll(1.0)] == ["good", "good"]:
            break
        time.sleep(0.01)
    else:
        pytest.fail("the file that came back is not read again")


def test_the_wrong_sensor_is_refused() -> None:
    """A 1-wire sensor's name is its serial number."""
    peer = FilePeer()
    peer.behave("stranger")
    driver = NumberFile(OPTIONS, read=peer.read)
    driver.open()
    with pytest.raises(IdentityError, match="got 'other'"):
        driver.identify()


def test_files_that_are_not_there_are_a_link_error(tmp_path: Path) -> None:
    """All of them; one alone is a missing reading."""
    options = {"identity": {"declared": "x"}, "yields": {"a": str(tmp_path / "a"), "b": str(tmp_path / "b")}}
    driver = create("numberfile", options)
    driver.open()
    driver.identify()
    with pytest.raises(LinkError, match="No such file"):
        driver.poll(1.0)
    (tmp_path / "b").write_text("3")
    assert [(r.quality, math.isnan(r.value)) for r in driver.poll(1.0)] == [
        ("missing", True),
        ("good", False),
    ]


def test_the_example_of_the_module_is_fit() -> None:
    """Documentation that a technician copies must work."""
    (block,) = [b for b in (module.__doc__ or "").split("\n\n") if b.startswith("    ")]
    options = yaml.safe_load(block)
    assert options.pop("driver") == "numberfile"
    assert NumberFile.check_options(options) == []
    (room, _) = NumberFile(options)._options.sources
    assert room.read(W1_GOOD.encode()) == (pytest.approx(23.125), "good")


@pytest.mark.parametrize(
    ("wrong", "place", "need"),
    [
        ({"identity": None}, "identity", "mapping"),
        ({"identity": {"file": "/who"}}, "identity.text", "is missing"),
        ({"yields": {"a": {}}}, "yields.a.file", "is missing"),
        ({"yields": {"a": "temp1_input"}}, "yields.a.file", "absolute path"),
        ({"yields": {"a": {"file": "/a", "pattern": "([0-9]+)"}}}, "yields.a.pattern", "(?P<value>...)"),
        ({"yields": {"a": {"file": "/a", "pattern": "("}}}, "yields.a.pattern", "regular expression"),
        ({"yields": {"a": {"file": "/a", "no_reading": [1]}}}, "yields.a.no_reading", "overload"),
        ({"port": "/dev/x"}, "port", "no option"),
    ],
)
def test_a_wrong_option_is_named_with_its_place(wrong: dict[str, Any], place: str, need: str) -> None:
    """Place, got, wanted."""
    (problem,) = NumberFile.check_options({**OPTIONS, **wrong})
    assert problem[0] == place
    assert need in problem[1]
