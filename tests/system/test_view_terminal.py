"""The view on a real pseudo-terminal: keys, resizing, stopping, and every way a terminal can go away."""

from __future__ import annotations

import fcntl
import json
import os
import pty
import re
import select
import signal
import struct
import subprocess
import sys
import termios
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from daq.store.journal import Journal
from daq.store.rows import Batch

PROGRAM = Path(__file__).with_name("test_view_samples.py")
LOOK = (
    "import sys; from pathlib import Path; from daq.view import watch;"
    "from daq.view.source import JournalSource;"
    "sys.exit(watch(JournalSource(Path(sys.argv[1]))))"
)
SEAT = (
    "import fcntl, os, sys, termios; os.setsid(); fcntl.ioctl(0, termios.TIOCSCTTY, 0);"
    "os.execv(sys.executable, [sys.executable, *sys.argv[1:]])"
)
"""Makes standard input the controlling terminal, in a process of its own: no fork of the tests themselves."""
PATIENCE_S = 20.0


class Terminal:
    """A child on a pseudo-terminal of its own, and what it has drawn so far."""

    def __init__(self, command: list[str], size: tuple[int, int], stderr: Path, **environment: str) -> None:
        self.drawn = ""
        self._stderr = stderr
        env = {k: v for k, v in os.environ.items() if k not in ("NO_COLOR", "COLUMNS", "LINES")}
        env |= {"TERM": "xterm-256color", "PYTHONIOENCODING": "utf-8"} | environment
        self.fd, slave = pty.openpty()
        self.resize(size)
        with stderr.open("w") as told:
            self._child = subprocess.Popen(
                [sys.executable, "-I", "-S", "-c", SEAT, *command],
                stdin=slave, stdout=slave, stderr=told, env=env,
            )  # fmt: skip
        os.close(slave)
        self.pid = self._child.pid

    def resize(self, size: tuple[int, int]) -> None:
        """Give the terminal another size; the kernel tells the child."""
        fcntl.ioctl(self.fd, termios.TIOCSWINSZ, struct.pack("HHHH", size[1], size[0], 0, 0))

    def press(self, keys: str) -> None:
        os.write(self.fd, keys.encode())

    def listen(self, seconds: float = 0.0) -> None:
        """Take what the child draws."""
        end = time.monotonic() + seconds
        while True:
            ready, _, _ = select.select([self.fd], [], [], max(end - time.monotonic(), 0.0))
            if not ready:
                return
            try:
                self.drawn += os.read(self.fd, 65536).decode("utf-8", "replace")
            except OSError:
                return

    def until(self, what: str | Callable[[], bool]) -> None:
        """Wait until the text is drawn (colours aside), or something is so."""
        end = time.monotonic() + PATIENCE_S
        while time.monotonic() < end:
            self.listen(0.05)
            if what() if callable(what) else what in re.sub(r"\x1b\[[0-9;?]*[a-zA-Z]", "", self.drawn):
                return
        pytest.fail(f"waited for {what}; drawn: {self.drawn[-3000:]!r}; {self._stderr.read_text()}")

    def ended(self) -> bool:
        """Whether the child has ended."""
        return self._child.poll() is not None

    def code(self) -> int:
        """Wait for the end; return the exit code, which is negative where a signal ended it."""
        self.until(self.ended)
        assert self._stderr.read_text() == ""
        return int(self._child.returncode)

    def close(self) -> None:
        """Take the terminal away, as when its window is closed."""
        if self.fd >= 0:
            os.close(self.fd)
            self.fd = -1

    def dispose(self) -> None:
        self.close()
        if not self.ended():
            self._child.kill()
            self._child.wait()


@pytest.fixture
def terminal(tmp_path: Path) -> Iterator[Callable[..., Terminal]]:
    """Start views, each on a terminal of its own, and end what the test leaves."""
    started: list[Terminal] = []

    def start(
        *, frames: int = 4, size: tuple[int, int] = (80, 24), journal: Path | None = None, **env: str
    ) -> Terminal:
        sample = [str(PROGRAM), str(frames), str(tmp_path / "entries.jsonl")]
        command = sample if journal is None else ["-c", LOOK, str(journal)]
        started.append(Terminal(command, size, tmp_path / f"stderr{len(started)}", **env))
        return started[-1]

    yield start
    for t in started:
        t.dispose()


def test_a_session_from_start_to_quit(terminal: Callable[..., Terminal], tmp_path: Path) -> None:
    """Choose, open, resize, acknowledge, quit; and the terminal is left as it was found."""
    t = terminal()
    echo = termios.tcgetattr(t.fd)[3] & termios.ECHO
    t.until("H3 needs someone now")
    assert "\x1b[?1049h" in t.drawn
    assert echo
    assert not termios.tcgetattr(t.fd)[3] & termios.ECHO
    t.press("j\r")
    t.until("326 h under load")
    t.resize((120, 40))
    t.until("Esc list  j/k other test")
    t.press("a")
    t.until("Acknowledge H7")
    t.press("MK\r")
    t.until("handed to the daemon")
    entry = {"frame": "H7", "entry": "acknowledge", "initials": "MK", "note": ""}
    assert json.loads((tmp_path / "entries.jsonl").read_text()) == entry | {
        "values": {"alarm": "tertiary_detected", "subject": ""}
    }
    t.press("\x1b")
    t.until("j/k choose  Enter open")
    t.press("q")
    assert t.code() == 0
    assert t.drawn.rindex("\x1b[?1049l") > t.drawn.rindex("\x1b[?1049h")
    assert t.drawn.rindex("\x1b[?25h") > t.drawn.rindex("\x1b[?25l")
    assert termios.tcgetattr(t.fd)[3] & termios.ECHO


def test_a_terminal_of_one_cell_is_enough(terminal: Callable[..., Terminal]) -> None:
    """Somebody will make the pane that small; it must come back when it grows."""
    t = terminal(size=(1, 1))
    t.until("!")
    t.resize((80, 24))
    t.until("H3 needs someone now")
    t.press("q")
    assert t.code() == 0


def test_a_size_in_the_environment_does_not_fix_it(terminal: Callable[..., Terminal]) -> None:
    """Some shells export COLUMNS and LINES, which are of the past after a resize."""
    t = terminal(size=(120, 40), COLUMNS="50", LINES="10")
    t.until("n next alarm")
    t.press("q")
    assert t.code() == 0


@pytest.mark.parametrize("way", ["close", "hangup", "terminate", "interrupt"])
def test_the_view_ends_quietly_however_it_is_ended(terminal: Callable[..., Terminal], way: str) -> None:
    """A closed window is no error, and leaves neither a process nor a traceback."""
    t = terminal()
    t.until("H3 needs someone now")
    if way == "close":
        t.close()
        t._child.wait(PATIENCE_S)
        assert t._stderr.read_text() == ""
        return
    if way == "interrupt":
        t.press("\x03")
    else:
        os.kill(t.pid, signal.SIGHUP if way == "hangup" else signal.SIGTERM)
    assert t.code() == 0
    t.listen(0.1)
    assert "\x1b[?1049l" in t.drawn


def test_a_stopped_view_gives_the_terminal_back_and_returns(terminal: Callable[..., Terminal]) -> None:
    """Ctrl-Z must leave a shell that can be typed into, and `fg` a whole screen."""
    t = terminal()
    t.until("H3 needs someone now")
    t.press("\x1a")
    t.until(lambda: os.waitpid(t.pid, os.WNOHANG | os.WUNTRACED)[0] == t.pid)
    t.listen(0.1)
    assert t.drawn.endswith("\x1b[?25h\x1b[?1049l")
    assert termios.tcgetattr(t.fd)[3] & termios.ECHO
    t.drawn = ""
    os.kill(t.pid, signal.SIGCONT)
    t.until("H3 needs someone now")
    assert not termios.tcgetattr(t.fd)[3] & termios.ECHO
    t.press("q")
    assert t.code() == 0


def test_no_colour_and_no_unicode_where_they_are_not_wanted(terminal: Callable[..., Terminal]) -> None:
    """NO_COLOR and an ASCII line are obeyed on the wire, not only in the words."""
    t = terminal(NO_COLOR="1", PYTHONIOENCODING="ascii")
    t.until("H3 needs someone now")
    t.press("q")
    assert t.code() == 0
    assert t.drawn.isascii()
    assert not re.search(r"\x1b\[(?:\d+;)*3\d", t.drawn)


def test_a_view_whose_terminal_nobody_reads_harms_no_journal(
    terminal: Callable[..., Terminal], tmp_path: Path
) -> None:
    """It stands still in the middle of drawing; the daemon's commits and checkpoints go on."""
    status = {"": {"site": "s" * 50, "now_tick": 0}} | {
        f"H{i}": {"test_h": 1.0, "stage": "x" * 9} for i in range(64)
    }
    with Journal.open(tmp_path / "j", site="hall-a") as journal:
        journal.commit(Batch(status=status))
        t = terminal(journal=tmp_path / "j", size=(400, 100))
        t.until("H63")
        for n in range(25):  # more than the terminal's buffer holds, and nobody takes it
            journal.commit(Batch(status={**status, "": {"site": f"{n}" * 50, "now_tick": n * 10_000_000}}))
            assert journal.checkpoint()
            time.sleep(0.06)
        assert not t.ended()
        t.press("q")
        assert t.code() == 0


def test_a_journal_that_is_not_there_yet_is_waited_for(
    terminal: Callable[..., Terminal], tmp_path: Path
) -> None:
    """The view may be started before the daemon has made its first commit."""
    t = terminal(journal=tmp_path / "j")
    t.until("the journal cannot be read")
    with Journal.open(tmp_path / "j", site="hall-a") as journal:
        journal.commit(Batch(status={"": {"site": "hall-a", "now_tick": 1}, "H1": {}}))
        t.until("Nothing is known that needs anyone.")
        t.press("q")
        assert t.code() == 0


# --- without a terminal ---------------------------------------------------------------------


def run(tmp_path: Path, **more: object) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, str(PROGRAM), "64", str(tmp_path / "entries.jsonl")]
    return subprocess.run(command, text=True, timeout=PATIENCE_S, check=False, **more)  # type: ignore[call-overload,no-any-return]


def test_a_pipe_gets_one_list_and_no_control_codes(tmp_path: Path) -> None:
    """`upturn watch hall-a | mail ...` is a shift report."""
    done = run(tmp_path, capture_output=True, stdin=subprocess.DEVNULL)
    assert done.returncode == 0
    assert done.stderr == ""
    assert "\x1b" not in done.stdout
    assert "EMULATED BENCH" in done.stdout
    assert "H3 needs someone now" in done.stdout
    assert done.stdout.count("secondary") >= 60
    assert "\n\n\n" not in done.stdout


def test_a_pipe_that_nobody_reads_is_no_error(tmp_path: Path) -> None:
    """`upturn watch hall-a | head -1` ends without a traceback."""
    read, write = os.pipe()
    os.close(read)
    done = run(tmp_path, stdout=write, stderr=subprocess.PIPE, stdin=subprocess.DEVNULL)
    os.close(write)
    assert done.returncode == 0
    assert done.stderr == ""
