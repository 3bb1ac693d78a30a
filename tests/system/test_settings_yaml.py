"""YAML read so that a value means what a person sees, with the place of every mistake."""

from __future__ import annotations

import pytest

from daq.yamlmarks import DEEPEST, MOST_VALUES, Plain, number, read, resolve, whole


def said(text: str) -> list[str]:
    return [p.say("f") for p in read(text).problems]


@pytest.mark.parametrize(
    ("written", "value"),
    [
        ("1e-5", 1e-5),  # text in YAML 1.1 for want of a point
        ("1E-5", 1e-5),
        ("-2.5e+3", -2500.0),
        (".5", 0.5),
        ("5.", 5.0),
        ("+7", 7.0),
        ("0", 0.0),
        ("0.10", 0.1),
        ("010", None),  # 8 in YAML 1.1
        ("00.5", None),
        ("0x1F", None),
        ("1_000", None),
        ("12:30:00", None),  # 45000 in YAML 1.1
        ("1,5", None),
        (".inf", None),
        (".nan", None),
        ("nan", None),
        ("1e999", None),
        ("no", None),
        ("", None),
        ("٣", None),
    ],
)
def test_a_number_is_what_looks_like_one(written: str, value: float | None) -> None:
    """Nobody who writes 010 or 12:30:00 means 8 or 45000."""
    assert number(Plain(written)) == value
    assert number(written) is None, "what was quoted is text"


def test_options_of_unknown_kind_mean_what_they_look_like() -> None:
    """7E1 is how a serial line is set up, not seventy; no is an answer, not a falsehood."""
    tree = read("[7E1, 7e1, 8N1, 70, 1e-5, 1.50, true, no, on, 010, 12:30:00, '5', ~x, 1e2]").tree
    assert resolve(tree) == [
        "7E1", "7e1", "8N1", 70, 1e-5, 1.5, True, "no", "on", "010", "12:30:00", "5", "~x", 100.0,
    ]  # fmt: skip
    assert whole(Plain("1e2")) is None


def test_each_value_and_key_has_its_place() -> None:
    """Lines and columns count from 1, as editors do."""
    d = read("a: 1\nb:\n  c: [x, {d: y}]\n")
    assert d.place(("a",)) == (1, 4)
    assert d.place(("b", "c", 1, "d")) == (3, 14)
    assert d.place(("b", "c", 1, "d"), at_key=True) == (3, 11)
    assert d.place(("b", "nothing", "here")) == (2, 1), "what is missing is shown where it should be"
    assert d.place(("z",)) == (1, 1)


@pytest.mark.parametrize(
    ("text", "complaint"),
    [
        ("", "f:1:1: got an empty file, wanted keys and values"),
        ("# only\n\n", "f:1:1: got an empty file, wanted keys and values"),
        ("a:\n\tb: 1\n", "f:2:1: got a tab, wanted spaces for indentation"),
        ("a:\n  b: 1\n \tc: 2\n", "f:3:2: got a tab, wanted spaces for indentation"),
        ("a: 1\n---\nb: 2\n", "f:2:1: not YAML: expected a single document in the stream, but found another"),
        ("a: {b: 1\nc: 2\n", "f:2:2: not YAML: while parsing a flow mapping"),
        ("a: 'x\n", "f:2:1: not YAML: while scanning a quoted scalar, found unexpected end of stream"),
        ("a: *nope\n", "f:1:4: not YAML: found undefined alias"),
        ("a: \x07\n", "f:1:4: got the character U+0007, wanted printable text"),
        ("ab: \x00\n", "f:1:5: got the character U+0000, wanted printable text"),
        ("a: 1\nb: 2\na: 3\n", "f:3:1: a: got this key again (first in line 1), wanted it once"),
        ("x: {a: 1, a: 1}\n", "f:1:11: x.a: got this key again (first in line 1), wanted it once"),
        ("a:\nb: 1\n", "f:1:1: a: got nothing, wanted a value (or leave the key out)"),
        ("a: null\n", "f:1:1: a: got nothing, wanted a value"),
        ("a: ~\n", "f:1:1: a: got nothing, wanted a value"),
        ("a: &x [1, *x]\n", "f:1:4: a[1]: got a reference to something that contains it"),
        ("a: &x {b: *x}\n", "f:1:4: a.b: got a reference to something that contains it"),
        ("a: &x {<<: *x}\n", "f:1:1: a.<<: got a reference to something that contains it"),
        ("a: {<<: 3}\n", "f:1:1: a.<<: got << with something else than a mapping"),
        ("a: !!int 3\n", "f:1:4: a: got the tag 'tag:yaml.org,2002:int', wanted a value without a tag"),
        ("a: !x {}\n", "f:1:4: a: got the tag '!x', wanted a value without a tag"),
        ("[1, 2]: 3\n", "f:1:1: got a key that is no text, wanted a word"),
        ("a: " + "[" * 60 + "]" * 60, f"got more than {DEEPEST} levels, wanted a few"),
        ("a: " + "[" * 5000 + "]" * 5000, "f:"),
    ],
    ids=range(24),
)  # fmt: skip
def test_a_mistake_of_structure_is_named_with_its_place(text: str, complaint: str) -> None:
    """The traps of YAML that a settings file can fall into; none may end in a traceback."""
    found = said(text)
    assert len(found) == 1
    assert complaint in found[0]


def test_all_mistakes_of_structure_are_named_at_once() -> None:
    """One run, one list."""
    assert len(said("a: 1\na: 2\nb:\nc: !x 1\n? [1]\n: 2\n")) == 4


def test_references_share_and_what_stands_there_itself_wins() -> None:
    """Frames that are alike need not be written out."""
    d = read("a: &x {p: 1, q: [2]}\nb: {<<: *x, p: 3}\nc: *x\nd: {p: 5, <<: [{r: 1}, {r: 2, s: 3}]}\n")
    assert not d.problems
    assert resolve(d.tree["b"]) == {"p": 3, "q": [2]}
    assert resolve(d.tree["c"]) == {"p": 1, "q": [2]}
    assert resolve(d.tree["d"]) == {"p": 5, "r": 1, "s": 3}
    assert d.place(("b", "q", 0)) == (1, 18), "an inherited value stands where it was written"


def test_references_to_references_are_counted() -> None:
    """Ten lines of references can stand for billions of values."""
    lines = ["a0: &a0 [x, x, x, x, x, x, x, x, x, x]"]
    lines += [f"a{i}: &a{i} [" + ", ".join([f"*a{i - 1}"] * 10) + "]" for i in range(1, 10)]
    assert f"got more than {MOST_VALUES} values" in said("\n".join(lines))[0]
