"""Arguments in, one call, exit code out."""

from __future__ import annotations

import argparse
import io
import math
import os
import signal
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Final

from daq import __version__
from daq.exits import BROKEN, BUSY, DAMAGED, INPUT, OK, TROUBLE, USAGE
from daq.records import UpturnError

EPILOG: Final = f"""\
exit codes:
  {OK}   done
  {TROUBLE}   done, but something needs a look (a quarantined test, an alarm source that failed)
  {USAGE}   wrong arguments or settings; every mistake is on stderr as file:line:col: path: message
  {INPUT}   an input cannot be read; the message names file, line and column
  {BUSY}   the journal is held by another running daemon, which the message names
  {DAMAGED}   the record is damaged: verify names each fault
  {BROKEN}  disk or file system error: nothing more was acknowledged; the service manager restarts

Upturn advises. Never wire it as the only protection of people, furnaces or specimens.
"""


def seconds(text: str) -> float:
    """Return a number of seconds given on the command line."""
    try:
        x = float(text)
    except ValueError:
        x = math.nan
    if not 0.0 < x < math.inf:
        raise argparse.ArgumentTypeError(f"got {text!r}, wanted a number of seconds above 0")
    return x


def count(text: str) -> int:
    """Return a number of things given on the command line."""
    if not text.isascii() or not text.isdigit() or int(text[:18]) == 0:
        raise argparse.ArgumentTypeError(f"got {text!r}, wanted a whole number above 0")
    return int(text[:18])


def whole(text: str) -> int:
    """Return a whole number given on the command line."""
    if not text.isascii() or not text.isdigit():
        raise argparse.ArgumentTypeError(f"got {text!r}, wanted a whole number")
    return int(text[:18])


def parser() -> argparse.ArgumentParser:
    """Return the parser of all commands."""
    plain = argparse.RawDescriptionHelpFormatter
    top = argparse.ArgumentParser(
        prog="upturn",
        description="Watches creep tests for weeks to years: strain rate, stages, rupture forecast, alarms.",
        epilog=EPILOG,
        formatter_class=plain,
    )
    top.add_argument("--version", action="version", version=f"upturn {__version__}")
    commands = top.add_subparsers(dest="command", metavar="COMMAND", required=True)

    def add(name: str, text: str, more: str = "") -> argparse.ArgumentParser:
        return commands.add_parser(
            name,
            help=text,
            description=f"{text[0].upper()}{text[1:]}.",
            epilog=more,
            formatter_class=plain,
        )

    p = add("run", "watch the frames of a lab file until told to stop (Ctrl-C or SIGTERM)")
    p.add_argument("lab", type=Path, metavar="LAB.yaml", help="the settings of this host")
    p.add_argument("--plain", action="store_true", help="log lines even on a terminal, instead of the view")
    p.add_argument(
        "--for", dest="seconds", type=seconds, metavar="SECONDS", help="stop by itself after this time"
    )

    p = add("watch", "look at a running daemon, or at the record it left (read-only)")
    p.add_argument(
        "journal", type=Path, metavar="JOURNAL", help="the journal folder, or the lab file that names it"
    )

    p = add(
        "tell",
        "make an entry: what a person did or saw",
        "examples:\n  upturn tell --lab hall-a.yaml H1 loaded --initials MK\n"
        "  upturn tell --lab hall-a.yaml H1 acknowledge tertiary_detected --initials MK\n"
        "  upturn tell --lab hall-a.yaml H1 shelve temperature_low --hours 4 --initials MK\n",
    )
    from daq.entries import ENTRIES

    p.add_argument(
        "--lab", type=Path, required=True, metavar="LAB.yaml", help="the lab file, or its journal folder"
    )
    p.add_argument(
        "frame", metavar="FRAME", help="frame or FRAME/POSITION; 'host' for the installation itself"
    )
    p.add_argument(
        "entry",
        choices=sorted(ENTRIES),
        metavar="ENTRY",
        help="; ".join(f"{k}: {v}" for k, v in ENTRIES.items()),
    )
    p.add_argument("alarm", nargs="?", default="", metavar="ALARM", help="one alarm (else all of the frame)")
    p.add_argument("--initials", required=True, help="who you are")
    p.add_argument("--subject", default="", help="what the alarm concerns, where it names something")
    p.add_argument("--hours", type=float, help="for shelve: how long")
    p.add_argument(
        "--minutes-ago", type=float, default=0.0, help="for loaded: how long ago the full load was on"
    )
    p.add_argument("--note", default="", help="a remark for the record")

    p = add(
        "replay",
        "run a recording or a journal through the same engine, at full speed",
        "examples:\n  upturn replay --rules LAB.yaml --frame H1 H1.csv --findings out.jsonl\n"
        "  upturn replay var/hall-a --findings out.jsonl\n"
        "  upturn replay H1-S-1.zip --findings out.jsonl\n",
    )
    p.add_argument("source", type=Path, metavar="SOURCE", help="a recording, a journal folder or an archive")
    p.add_argument("--rules", type=Path, metavar="LAB.yaml", help="the lab file (for a recording)")
    p.add_argument(
        "--frame", help="the frame (for a recording: which one it is of; for a journal: only this one)"
    )
    p.add_argument(
        "--findings", type=Path, metavar="OUT.jsonl", help="write one JSON line a finding ('-' for stdout)"
    )
    p.add_argument(
        "--cut", type=int, metavar="SEED", help="cut the input into blocks at random: nothing may change"
    )

    p = add(
        "prove",
        "see on simulated rigs like a frame how detection would do, and choose the level of evidence",
        "examples:\n  upturn prove LAB.yaml --frame H1 --rigs 300 --seed 1 --out proof-h1\n"
        "  upturn prove LAB.yaml --frame H1 --rigs 300 --seed 1 --out proof-h1 --like H1.csv\n\n"
        "Writes rows.jsonl, table.json and evidence.png to --out. The same command goes on where it was\n"
        "stopped. The key false_share of the frame sets the level. Simulated rigs; advises only.\n",
    )
    p.add_argument("lab", type=Path, metavar="LAB.yaml", help="the lab file")
    p.add_argument("--frame", required=True, metavar="NAME", help="the frame, or FRAME/POSITION of a string")
    p.add_argument("--rigs", type=count, default=300, metavar="N", help="how many rigs (default 300)")
    p.add_argument("--seed", type=whole, default=1, metavar="S", help="which rigs (default 1)")
    p.add_argument("--out", type=Path, metavar="DIR", help="folder to keep rows, table and plot in")
    p.add_argument(
        "--like", type=Path, metavar="FILE.csv", help="a recording of this frame to take the noise from"
    )
    p.add_argument(
        "--curve", action="append", metavar="KIND", help="only curves of this family (again for more)"
    )
    p.add_argument(
        "--scans",
        type=count,
        default=6000,
        metavar="N",
        help="thin rigs with more scans (default 6000; below 500 thinning itself delays)",
    )
    workers = p.add_mutually_exclusive_group()
    workers.add_argument("--workers", type=count, metavar="N", help="processes (default: one a core)")
    workers.add_argument("--cluster", metavar="ADDRESS", help="scheduler of a dask cluster: tcp://HOST:PORT")

    p = add(
        "export",
        "write the raw record of a frame, its findings, or the archive of one test, as plain files",
        "examples:\n  upturn export var/hall-a --frame H1 --csv H1.csv\n"
        "  upturn export var/hall-a --bundle H1.zip --test H1\n"
        "  upturn export var/hall-a --bundle H1-S-1.zip --test H1@S-1\n",
    )
    p.add_argument(
        "journal", type=Path, metavar="JOURNAL", help="the journal folder, or the lab file that names it"
    )
    p.add_argument("--frame", help="the frame to write (needed for --csv)")
    p.add_argument(
        "--csv", type=Path, metavar="OUT.csv", help="raw readings as a recording that replay accepts"
    )
    p.add_argument(
        "--findings", type=Path, metavar="OUT.jsonl", help="the findings as concluded live ('-' for stdout)"
    )

    p.add_argument(
        "--bundle",
        type=Path,
        metavar="OUT.zip",
        help="one test in one file: what verify, replay and adopt take",
    )
    p.add_argument(
        "--test",
        metavar="TEST",
        help="for --bundle: FRAME or FRAME/POSITION, the newest test there; @SPECIMEN or @N: another one",
    )

    p = add(
        "verify",
        "look for any change, gap or damage in the record; nothing is written",
        "examples:\n  upturn verify var/hall-a\n  upturn verify H1-S-1.zip --noted 4f0c9a7733be21d0\n\n"
        "A daemon may be running meanwhile. One line a test, one a fault. The hash chain shows any change\n"
        "after which not every later hash was made anew; against someone who can do that, note the last\n"
        "hash of a test elsewhere and give it with --noted later.\n",
    )
    p.add_argument(
        "places", type=Path, nargs="+", metavar="PLACE", help="a journal folder, a sealed file or an archive"
    )
    p.add_argument("--json", action="store_true", help="one JSON object a line instead")
    p.add_argument(
        "--noted", action="append", metavar="HASH", help="a hash noted earlier, which must be there still"
    )

    p = add(
        "adopt",
        "begin a new journal with the test in an archive, so that this host goes on with it",
        "Give the lab file a journal folder without a record and the frame with the same specimen; then\n"
        "'upturn run' goes on with the test. Two hosts must not go on with one specimen.\n",
    )
    p.add_argument("bundle", type=Path, metavar="ARCHIVE.zip", help="what export --bundle wrote")
    p.add_argument("lab", type=Path, metavar="LAB.yaml", help="the settings of this host")

    p = add(
        "listen", "print the alarms that arrive at a broker, with their ids (a subscriber to try things with)"
    )
    p.add_argument("lab", type=Path, metavar="LAB.yaml", help="the lab file that names the broker")
    p.add_argument("--topic", default="", help="another topic filter than all of this site")
    p.add_argument("--count", type=count, help="stop after so many messages")
    p.add_argument("--for", dest="seconds", type=seconds, metavar="SECONDS", help="stop after this time")
    return top


def main(argv: Sequence[str] | None = None) -> int:
    """Run one command; return its exit code. Errors go to stderr, one line each."""
    # the matrices here are small: threads of the linear algebra library would only fight over the cores,
    # and one thread keeps its sums in one order whatever the machine
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    os.environ.setdefault("OMP_NUM_THREADS", "1")
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):  # a terminal without a letter must not end a command
            stream.reconfigure(errors="backslashreplace")
    name = "upturn"
    try:
        args = parser().parse_args(argv)
        name = f"upturn {args.command}"
        from daq import commands  # late, so that --help costs nothing

        try:
            code = commands.RUN[args.command](args)
            if sys.stdout is not None:
                sys.stdout.flush()  # here, where what goes wrong can still be said
            return code
        except UpturnError as error:
            print(f"{name}: {error}", file=sys.stderr)
            return commands.exit_code(error)
    except KeyboardInterrupt:
        return 128 + signal.SIGINT
    except BrokenPipeError:
        _to_nowhere()
        return OK
    except OSError as error:
        where = "output" if error.filename is None else os.fsdecode(error.filename)
        print(f"{name}: {where}: got {error.strerror or error}", file=sys.stderr)
        _to_nowhere()
        return BROKEN


def _to_nowhere() -> None:
    """What is still in the buffer of stdout cannot be written; it must not be tried again at the exit."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


if __name__ == "__main__":
    sys.exit(main())
