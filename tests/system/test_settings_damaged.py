"""Lab files damaged at random: a settings error or settings, never a traceback."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.settings import SettingsError, loads

CONFIG = Path(__file__).parents[2] / "config"


def bare(name: str) -> str:
    """A sample without its comments."""
    lines = (CONFIG / f"{name}.yaml").read_text(encoding="utf-8").split("\n")
    return "\n".join(x for x in lines if x.strip() and not x.lstrip().startswith("#"))


SAMPLES = [bare("full"), bare("string")]
PIECES = [
    "", "x", "[", "{}", "- 1", ": ", "'", '"', "\t", "no", "1e-5", "010", "&a ", "*a", "<<: *a", "!!set ",
    "null", "é", "\x07", "0", "-1", "[1, 2]", "{a: b}",
]  # fmt: skip
CUT = st.tuples(st.integers(0, 10**6), st.integers(0, 12), st.sampled_from(PIECES))


def mistakes(text: str) -> str:
    """What is said of ``text``, empty if it is right; anything but a settings error comes through."""
    try:
        loads(text, "lab.yaml")
    except SettingsError as error:
        return str(error)
    return ""


@settings(max_examples=150, deadline=None)
@given(sample=st.sampled_from(SAMPLES), cuts=st.lists(CUT, min_size=1, max_size=4))
def test_a_damaged_file_is_a_settings_error_or_settings(
    sample: str, cuts: list[tuple[int, int, str]]
) -> None:
    """Whatever an editor, a merge or a disk did to it: places are in the file, messages are whole."""
    text = sample
    for place, length, piece in cuts:
        at = place % len(text)
        text = text[:at] + piece + text[at + length :]
    found = mistakes(text)
    for line in filter(None, found.split("\n")):
        file, number, column, _ = line.split(":", 3)
        assert file == "lab.yaml"
        assert 1 <= int(number) <= text.count("\n") + 2
        assert int(column) >= 1


@pytest.mark.parametrize("sample", SAMPLES, ids=["full", "string"])
def test_any_value_may_be_of_any_kind(sample: str) -> None:
    """Each value in turn becomes a list, a mapping, a word and nothing."""
    lines = sample.split("\n")
    for i, line in enumerate(lines):
        key, colon, _ = line.partition(": ")
        if not colon:
            key, colon, _ = line.partition(":")
        for value in ("[1, {a: 2}]", "{a: [1]}", "-7"):
            found = mistakes("\n".join([*lines[:i], f"{key}: {value}", *lines[i + 1 :]]))
            assert "Traceback" not in found
            assert found == "" or found.startswith("lab.yaml:")
