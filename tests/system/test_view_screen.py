"""What the screen says, at every size, and that it never says more than fits."""

from __future__ import annotations

import io
import math
import random
import re
from dataclasses import replace
from datetime import UTC

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from rich.console import Console
from rich.text import Text
from test_view_samples import HOUR, NOW, row, rows, shot, tertiary_alarm

from daq.view.commands import Choice, Page, Prompt, ViewState
from daq.view.curves import life_line
from daq.view.model import AlarmRow, Curve, Expected, Snapshot, TestRow
from daq.view.screen import compose
from daq.view.sentences import ADVICE
from daq.view.words import ASCII, UNICODE, Words, figures, folded, short_span, span

LIST = ViewState()
SIZES = [(80, 24), (120, 40), (200, 60)]
PAGES = [
    ViewState(),
    ViewState(page=Page.DETAIL, chosen="H7"),
    ViewState(page=Page.HELP),
    ViewState(chosen="H3", notice="something was said " * 8),
    ViewState(
        prompt=Prompt(
            "shelve", "H7", (Choice("a", "b"), Choice("c", "")), 2, (("hours", "1"), ("initials", ""))
        )
    ),
]


def screen(
    s: Snapshot, size: tuple[int, int] = (80, 24), state: ViewState = LIST, *, plain: bool = False
) -> list[str]:
    """Return the lines of a screen as bare text."""
    words = Words(ASCII if plain else UNICODE, UTC)
    return [line.plain for line in compose(state, s, rows(s), size, words)]


def drawn(s: Snapshot, size: tuple[int, int], state: ViewState, **console: object) -> str:
    """Return what a terminal of that size is sent for the screen."""
    out = Console(file=io.StringIO(), width=size[0], height=size[1], force_terminal=True, **console)  # type: ignore[arg-type]
    lines = compose(state, s, rows(s), size, Words(UNICODE, UTC))
    out.print(Text("\n", no_wrap=True, overflow="crop", end="").join(lines), end="")
    assert isinstance(out.file, io.StringIO)
    return out.file.getvalue()


@pytest.mark.parametrize("state", PAGES)
@pytest.mark.parametrize("frames", [0, 4, 64])
@pytest.mark.parametrize("size", [*SIZES, (40, 10), (17, 5), (5, 3), (3, 2), (1, 1)])
def test_a_screen_is_exactly_as_large_as_its_terminal(
    size: tuple[int, int], frames: int, state: ViewState
) -> None:
    """A line too long or too many would scroll the terminal and tear the picture."""
    s = shot(frames)
    for plain in (False, True):
        words = Words(ASCII if plain else UNICODE, UTC)
        lines = compose(state, s, rows(s), size, words)
        assert len(lines) == size[1]
        assert max(line.cell_len for line in lines) <= size[0]
    sent = drawn(s, size, state, color_system=None)
    assert len(sent.split("\n")) == size[1]


maybe = st.one_of(st.none(), st.floats(-1e9, 1e9), st.sampled_from([0.0, 1e-12, -1e-12, 5e-324, 1e300]))
tick = st.one_of(st.none(), st.integers(-(10**18), 10**18), st.integers(NOW - 100 * HOUR, NOW + 9000 * HOUR))
texts = st.text(st.characters(exclude_categories=["Cs"]), max_size=60)


@st.composite
def snapshots(draw: st.DrawFn) -> Snapshot:
    """Return anything that a source may say, likely or not."""
    alarm = st.builds(AlarmRow, texts, texts, texts, texts, texts, tick, tick, texts)
    x = draw(st.lists(st.floats(-10, 1e4), max_size=6).map(sorted))
    y = draw(st.lists(st.one_of(st.floats(-1, 1), st.just(math.nan)), min_size=len(x), max_size=len(x)))
    curve = Curve(np.array(x), np.array(y), np.array(y[::-1]))
    some = [
        TestRow(
            f"F{i}", draw(texts), draw(texts), *(draw(maybe) for _ in range(12)),
            alarms=tuple(draw(st.lists(alarm, max_size=3))), next_event=draw(st.one_of(st.none(), texts)),
            can_wait_until_tick=draw(tick), curve=draw(st.sampled_from([curve, None])),
            marks=tuple(draw(st.lists(st.tuples(st.floats(-9, 1e4), texts), max_size=3))),
            expected=tuple(draw(st.lists(st.builds(Expected, texts, *[st.floats(0, 1e5)] * 3), max_size=2))),
            quarantined=draw(texts),
        )
        for i in range(draw(st.integers(0, 3)))
    ]  # fmt: skip
    host = tuple(draw(st.lists(alarm, max_size=2)))
    return Snapshot(draw(texts), draw(st.integers(0, 10**17)), 1.0, True, draw(maybe), host, tuple(some))


@settings(max_examples=60, deadline=None)
@given(snapshots(), st.integers(1, 130), st.integers(1, 45), st.sampled_from(list(Page)), st.booleans())
def test_no_news_breaks_the_screen(s: Snapshot, width: int, height: int, page: Page, plain: bool) -> None:
    """Whatever a status holds or lacks, the person gets a screen of the right size, without control codes."""
    words = Words(ASCII if plain else UNICODE, UTC)
    for chosen in (None, *(p.name for p in rows(s))):
        lines = compose(ViewState(page=page, chosen=chosen), s, rows(s), (width, height), words)
        assert len(lines) == height
        assert all(line.cell_len <= width for line in lines)
        told = "".join(line.plain for line in lines)
        assert all(c.isprintable() for c in told)
        assert not plain or told.isascii()


def test_a_message_cannot_steer_the_terminal() -> None:
    """Messages may carry what an instrument sent."""
    alarm = AlarmRow(
        "link_lost", "\x1b[2J", message="answer was \x1b]0;x\x07 and \x9b31m \u202e reversed\r\n"
    )
    s = replace(shot(1), host_alarms=(alarm,))
    for state in (ViewState(), ViewState(page=Page.DETAIL, chosen="")):
        told = "".join(screen(s, (120, 40), state))
        assert "link lost" in told
        assert not set(told) & {"\x1b", "\x07", "\x9b", "\u202e", "\r", "\n"}


@pytest.mark.parametrize("size", [*SIZES, (60, 15), (40, 8), (24, 5)])
@pytest.mark.parametrize("state", PAGES)
def test_an_emulated_bench_is_called_so_all_the_time(size: tuple[int, int], state: ViewState) -> None:
    """Figures from a bench must never pass for a specimen's."""
    bench = shot(4, emulated=True, speed=3600.0)
    assert "EMULATED" in screen(bench, size, state)[0]
    if size[0] >= 80:
        assert "EMULATED BENCH  time ×3600" in screen(bench, size, state)[0]
    assert not any("EMULATED" in line for line in screen(shot(4), size, state))


@pytest.mark.parametrize("size", SIZES)
@pytest.mark.parametrize("state", PAGES)
def test_the_advice_stands_at_the_foot_all_the_time(size: tuple[int, int], state: ViewState) -> None:
    """The view is no protection, and whoever looks at it is told so."""
    assert screen(shot(64), size, state)[-1].rstrip().endswith(ADVICE)


def test_without_colour_nothing_is_lost() -> None:
    """Colour only repeats what a sign or a word says; NO_COLOR takes it away altogether."""
    s = shot(4)
    bare = drawn(s, (80, 24), ViewState(), color_system="standard", no_color=True)
    coloured = drawn(s, (80, 24), ViewState(), color_system="standard")
    assert "\x1b[1;31m" in coloured
    assert not any(f"{code}m" in bare for code in (";31", "[31", "[33", ";33", "[36", ";36"))
    told = "\n".join(screen(s))
    for word in (
        "! H7",
        "! tertiary detected",
        "unack",
        "tertiary",
        "↗",
        "·>",
        "now",
        "H3 needs someone now",
    ):
        assert word in told


def test_ascii_says_the_same_in_the_same_places() -> None:
    """A terminal without braille shows the same words where the others show them."""
    for size in SIZES:
        for state in (PAGES[0], PAGES[2], PAGES[4]):
            plain, rich = screen(shot(64), size, state, plain=True), screen(shot(64), size, state)
            assert "".join(plain).isascii()
            for a, b in zip(plain, rich, strict=True):
                words = [[(m.start(), m[0]) for m in re.finditer("[A-Za-z]{4,}", line)] for line in (a, b)]
                assert words[0] == words[1]


# --- the list -----------------------------------------------------------------------------


def alarm(name: str, priority: str, state: str = "unacknowledged") -> AlarmRow:
    """Return an alarm that names no time until which it can wait."""
    return AlarmRow(name, "", state, priority)


def test_rows_stand_in_the_order_of_time_left() -> None:
    """What can wait least is on top, whatever it is; what needs nobody is below."""
    rng = np.random.default_rng(1)
    tests = [
        row("quiet", "secondary", 900, 300, rng),
        row("over", "ruptured", 900, 899, rng),
        row("week", "tertiary", 900, 700, rng, can_wait_until_tick=NOW + 100 * HOUR),
        row("hour", "tertiary", 900, 800, rng, can_wait_until_tick=NOW + HOUR // 2),
        row("shelved", "secondary", 9, 5, rng, alarms=(replace(tertiary_alarm(), state="shelved"),)),
        row("late", "secondary", 900, 300, rng, can_wait_until_tick=NOW - HOUR),
        row("hot", "secondary", 900, 300, rng, alarms=(alarm("temperature_high", "high"),)),
        row("cold", "secondary", 9, 5, rng, alarms=(alarm("temperature_low", "medium"),)),
        row("seen", "secondary", 9, 5, rng, alarms=(alarm("gradient", "low", "acknowledged"),)),
    ]  # fmt: skip
    random.Random(1).shuffle(tests)
    names = [p.name for p in rows(replace(shot(0), tests=tuple(tests)))]
    assert names == ["hot", "late", "hour", "cold", "week", "seen", "quiet", "shelved", "over"]


def test_the_order_does_not_change_while_time_passes() -> None:
    """Rows that jump about at every redraw cannot be chosen or read."""
    s = shot(64)
    later = replace(s, now_tick=s.now_tick + HOUR)
    assert [p.name for p in rows(s)][2:] == [p.name for p in rows(later)][2:]


def test_the_headline_says_who_is_needed_when() -> None:
    """At three in the morning one sentence is read, not sixty-four rows."""
    s = shot(4)
    assert screen(s)[1] == "H3 needs someone now. Then H7 by 07:30, in 4 h 18 min. 2 alarms unacknowledged."
    only = replace(s, tests=s.tests[:1])
    assert screen(only, (120, 40))[1].startswith(
        "Nobody is needed before 07:30 (H7, in 4 h 18 min), as far as is known."
    )
    assert screen(replace(s, tests=s.tests[2:]))[1] == "Nothing is known that needs anyone."
    old = screen(replace(s, commit_age_s=840.0))
    assert "RECORD SILENT 14 min" in old[0]
    assert "what you see is old" in old[1]


def test_a_row_says_all_that_the_list_must() -> None:
    """Stage and age, strain, rate, interval, trend, temperature in its band, alarm, what comes next."""
    told = screen(shot(4))
    at = next(i for i, line in enumerate(told) if " H7 " in line and "tertiary" in line)
    for words in ("4h18", "!", "12.4 h", "%/h", "±6%", "↗", "×", " K", "["):
        assert words in told[at]
    below = "\n".join(told[at + 1 : at + 9])
    assert "! tertiary detected  unack 3h00  until 07:30" in below
    assert "next  rupture Wed 04:06 to Wed 18:06 (351 to 365 h, 90 %)" in below


@pytest.mark.parametrize(
    ("off", "strip"),
    [(-4.0, "<··│··]"), (-2.9, "[●·│··]"), (0.0, "[··●··]"), (2.9, "[··│·●]"), (3.5, "[··│··>")],
)
def test_the_strip_shows_where_in_the_band_the_specimen_is(off: float, strip: str) -> None:
    """Out of band is a sign at the edge, not a colour."""
    t = replace(shot(4).tests[3], temperature_c=980.0 + off)
    assert any(strip in line for line in screen(replace(shot(0), tests=(t,))))


def test_many_rows_are_turned_in_pages_and_the_rest_is_counted() -> None:
    """What is not on the screen must not be able to hide an alarm."""
    s = shot(64)
    s = replace(s, tests=(*s.tests[:60], *(replace(t, alarms=(tertiary_alarm(),)) for t in s.tests[60:])))
    seen: list[str] = []
    for p in rows(s)[::4]:
        told = screen(s, (80, 24), ViewState(chosen=p.name))
        assert any(line.startswith("▌") and f" {p.name} " in line for line in told)
        seen += [line for line in told if "below" in line or "above" in line]
    assert "▾ 58 below, none with an unacknowledged alarm" in seen[0]
    crowded = replace(s, tests=tuple(replace(t, alarms=(tertiary_alarm(),)) for t in s.tests))
    first = next(line for line in screen(crowded) if "below" in line)
    assert first == "▾ 58 below, 58 with an unacknowledged alarm, first needed by 07:30"


def test_wide_terminals_take_two_columns_before_they_say_less() -> None:
    """Sixty-four frames fit on one large screen, life lines and all."""
    told = screen(shot(64), (200, 60))
    for p in rows(shot(64)):
        assert any(f" {p.name} " in line for line in told), p.name


def test_the_life_line_lies_on_the_floor_at_the_minimum_and_rises_with_the_rate() -> None:
    """The sign of a turn is its shape, whatever the material and the time scale."""
    t_h = np.linspace(1, 1000, 200)
    words = Words(UNICODE, UTC)
    for scale in (1.0, 1e-3):
        flat = TestRow("X", test_h=1000.0, curve=Curve(t_h, t_h, np.full(200, 1e-6 * scale)))
        (line,) = life_line(flat, 60, 1, words)
        assert set(line.plain) == {"⣀"}
        noisy = replace(flat, curve=Curve(t_h, t_h, scale * (1e-6 + 5e-8 * np.sin(t_h))))
        assert {line.plain.strip() for line in life_line(noisy, 60, 3, words)[:2]} == {""}
        turned = replace(flat, curve=Curve(t_h, t_h, scale * np.where(t_h > 900, 3e-6, 1e-6)))
        lines = [line.plain for line in life_line(turned, 60, 3, words)]
        assert set(lines[2][:53]) == {"⣀"}
        assert set(lines[0][55:]) <= set("⠉⠁⠈⠒⠤⠔")


# --- one test -------------------------------------------------------------------------------


@pytest.mark.parametrize("size", SIZES)
def test_one_test_in_full_shows_both_curves_with_the_stages_marked(size: tuple[int, int]) -> None:
    """Strain and log rate stand over one time axis, and the marks between them belong to both."""
    told = screen(shot(4), size, ViewState(page=Page.DETAIL, chosen="H7"))
    text = "\n".join(told)
    for words in (
        "strain, %",
        "strain rate, %/h, log scale",
        "hours",
        "╵secondary",
        "╵tertiary",
        "2 of 4",
    ):
        assert words in text
    ahead = screen(shot(4), size, ViewState(page=Page.DETAIL, chosen="K2"))
    assert any(line.startswith(" " * 40) and "├──" in line for line in ahead)  # the forecast, on that axis
    between = next(i for i, line in enumerate(told) if "╵secondary" in line)
    column = told[between].index("╵secondary")
    dotted = [line for line in told if len(line) > column and line[column] == "·"]
    assert len(dotted) >= 4


def test_a_test_without_strain_is_shown_without_curves() -> None:
    """A stress rupture test has temperature and timer only."""
    t = TestRow(
        "R1", "S-R1", "loading", test_h=12.0, temperature_c=850.0, set_point_c=850.0, below_k=3.0, above_k=3.0
    )
    told = "\n".join(screen(replace(shot(0), tests=(t,)), (80, 24), ViewState(page=Page.DETAIL, chosen="R1")))
    assert "no curve yet" in told
    assert "in band" in told
    assert "strain -" in told


def test_alarms_in_full_say_what_to_do_and_notices_come_last() -> None:
    """A person woken by an alarm needs the next step, not its code."""
    told = screen(shot(4), (120, 40), ViewState(page=Page.DETAIL, chosen="H7"))
    assert any("To do: Decide before the time given." in line for line in told)
    told = screen(shot(4), (120, 40), ViewState(page=Page.DETAIL, chosen="H3"))
    high = next(i for i, line in enumerate(told) if "! temperature high (mid)" in line)
    noted = next(i for i, line in enumerate(told) if "i milestone reached (1 %)" in line)
    assert high < noted


# --- words ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("x", "text"),
    [(0.0, "0"), (0.0021, "0.00210"), (0.00099951, "0.00100"), (9.996e-5, "1.00e-4"), (2.1e-7, "2.10e-7"),
     (123.4, "123"), (999.6, "1.00e3"), (-0.5, "-0.500")],
)  # fmt: skip
def test_rates_have_three_figures(x: float, text: str) -> None:
    """Rounding must not make a fourth figure or lose one."""
    assert figures(x) == text


@pytest.mark.parametrize(
    ("s", "long", "short"),
    [(0, "0 s", "0s"), (99.4, "99 s", "99s"), (840, "14 min", "14min"), (15480, "4 h 18 min", "4h18"),
     (111600, "31 h 00 min", "31h"), (273600, "3 d 4 h", "76h"), (442800, "5 d 3 h", "5d3h"),
     (8.64e7, "1000 d", "1000d")],
)  # fmt: skip
def test_lengths_of_time_are_short_and_round(s: float, long: str, short: str) -> None:
    """A column of five cells has to hold seconds and years."""
    assert span(s) == long
    assert short_span(s) == short
    assert len(short) <= 5


def test_instants_are_as_near_as_they_need_to_be() -> None:
    """Today needs no date; next year needs no minute. The zone is named in the banner."""
    w = Words(UNICODE, UTC)
    assert w.when(NOW + 4 * HOUR, NOW) == "07:12"
    assert w.when(NOW + 30 * HOUR, NOW) == "Wed 09:12"
    assert w.when(NOW + 240 * HOUR, NOW) == "24 May 03:12"
    assert w.when(NOW + 9000 * HOUR, NOW) == "24 May 2025"
    assert w.when(10**19, NOW) == "-"
    assert w.clock(NOW) == "Tue 14 May 2024 03:12:40 UTC"


def test_long_messages_are_broken_at_blanks_and_cut_visibly() -> None:
    """Words that vanish without a sign are taken for the whole message."""
    assert folded("one two three four", 9, 5, "…") == ["one two", "three", "four"]
    assert folded("one two three four", 9, 2, "…") == ["one two", "three…"]
    assert folded("x" * 25, 10, 9, "…") == ["x" * 10, "x" * 10, "x" * 5]
    assert folded("一二三", 1, 9, "…") == ["一", "二", "三"]
    assert folded("", 9, 2, "…") == []
