"""The command line: reads the words, calls the wings, turns their errors into one line each.

Exit status: 0 done; 1 the work found faults, and reported them; 2 wrong use.
"""

from __future__ import annotations

import argparse
import re
import sys
from collections.abc import Callable, Sequence
from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import pandas as pd

    from companion.book.readings import Rejects
    from companion.settings.site import Site, TankSettings

CAUTION = "levelbook is no protection system: overfill protection, entry to tanks and work at height follow local codes."


class WrongUse(Exception):
    """What was asked for cannot be done as asked; the message says what to write instead."""


def main(words: Sequence[str] | None = None) -> int:
    """Run one command; returns the exit status."""
    args = _parser().parse_args(words)
    from companion.book.files import FileFault
    from companion.book.store import BookError
    from companion.settings.errors import SiteError

    try:
        command: Callable[[argparse.Namespace], int] = args.command
        return command(args)
    except WrongUse as error:
        return _said(error, 2)
    except (SiteError, FileFault, BookError) as error:
        return _said(error, 1)
    except BrokenPipeError:
        sys.stderr.close()  # whoever read us has gone, as in `levelbook ... | head`
        return 0
    except KeyboardInterrupt:
        return _said("stopped", 1)


def _said(error: object, status: int) -> int:
    for line in str(error).splitlines():
        print(f"levelbook: {line}", file=sys.stderr)
    return status


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(prog="levelbook", description="A book of tank levels that can be trusted.", epilog=CAUTION)
    parser.add_argument("--version", action="version", version=_version())
    commands = parser.add_subparsers(title="commands", metavar="COMMAND", required=True)

    def add(name: str, run: Callable[[argparse.Namespace], int], help: str, example: str) -> argparse.ArgumentParser:
        sub = commands.add_parser(name, help=help, description=help, epilog=f"example: levelbook {name} {example}")
        sub.set_defaults(command=run)
        return sub

    def site(sub: argparse.ArgumentParser) -> argparse.ArgumentParser:
        sub.add_argument("site", metavar="SITE", help="the site file, e.g. site.toml")
        return sub

    def tank(sub: argparse.ArgumentParser) -> argparse.ArgumentParser:
        site(sub).add_argument("tank", metavar="TANK", help="the tank's name in the site file")
        return sub

    def output(sub: argparse.ArgumentParser, help: str, default: str | None = "-") -> None:
        sub.add_argument("-o", "--output", metavar="F", default=default, required=default is None, help=help)

    def span(sub: argparse.ArgumentParser, kind: str) -> None:
        sub.add_argument("--from", dest="start", metavar=kind, required=True, help="from this local day or moment on")
        sub.add_argument("--to", dest="end", metavar=kind, required=True, help="to this local day, itself included, or moment")

    sub = add("demo", _demo, "everything on this machine: broker, simulated tanks, book, daily log", "--for 20 --out demo-book")
    sub.add_argument("--for", dest="seconds", type=float, metavar="SECONDS", help="end by itself after so long")
    sub.add_argument(
        "--out", type=Path, default=Path("demo-book"), metavar="DIR", help="folder for its files (default: demo-book)"
    )
    site(add("check", _check, "read the site file and its tables; say all that is wrong", "site.toml"))
    sub = tank(add("convert", _convert, "raw readings to figures", "site.toml north readings.csv -o figures.csv"))
    sub.add_argument("readings", metavar="READINGS.csv", help="a CSV of raw readings; - reads standard input")
    output(sub, "CSV of figures (default: standard output)")
    sub = tank(add("load", _load, "put a file of raw readings in the book", "site.toml north readings.csv"))
    sub.add_argument("readings", metavar="READINGS.csv", help="a CSV of raw readings; - reads standard input")
    sub = tank(
        add(
            "export",
            _export,
            "raw readings out of the book again",
            "site.toml north --from 2026-03-01 --to 2026-03-31 -o r.csv",
        )
    )
    span(sub, "T")
    output(sub, "CSV of readings (default: standard output)")
    sub = site(add("daily", _daily, "the daily volume log", "site.toml --from 2026-03-01 --to 2026-03-31 -o march.csv"))
    span(sub, "D")
    sub.add_argument("--tank", metavar="T", action="append", help="only this tank; may be given again")
    output(sub, "CSV, one row a tank and day (default: standard output)")
    sub = tank(
        add(
            "trend",
            _trend,
            "level, volume and grade against time",
            "site.toml north --from 2026-03-01 --to 2026-03-07 -o week.png",
        )
    )
    span(sub, "T")
    output(sub, "picture: .png, .svg or .pdf", None)
    site(add("listen", _listen, "readings from MQTT into the book, until stopped", "site.toml"))
    sub = site(
        add("move", _move, "the book into another store, the copy proved", "site.toml --to postgresql://db.example/levelbook")
    )
    sub.add_argument("--to", required=True, metavar="URL", help="an empty store: sqlite:FILE or postgresql://HOST/NAME")
    sub = site(
        add("backup", _backup, "the book of this moment into a file, proved; listening may go on", "site.toml -o 2026-03-01.db")
    )
    output(sub, "a new file", None)
    sub = site(
        add("restore", _restore, "a backup into the site's book, which must be empty, proved", "site.toml 2026-03-01.db")
    )
    sub.add_argument("backup", type=Path, metavar="FILE", help="what levelbook backup wrote")
    sub = tank(add("pack", _pack, "a logger's bundle for a tank", "site.toml north -o north-logger --main main.py"))
    output(sub, "folder for the bundle; one that is there is replaced", None)
    sub.add_argument("--main", type=Path, metavar="FILE", help="the program that the board runs, like those of examples/boards")
    sub.add_argument(
        "--error",
        metavar="E",
        help='how far the thinned table may be off, like "5 L" or "0.02 %%" of the full tank (the default)',
    )
    sub.add_argument("--micropython", metavar="V", help="compile for the board's MicroPython, like 1.22 (default: the newest)")
    sub.add_argument("--arch", metavar="A", help="the board's architecture, as mpy-cross names it, like xtensawin or armv6m")
    sub = add("flash", _flash, "a bundle onto a board, proved there; its spool stays", "north-logger /dev/ttyACM0")
    sub.add_argument("folder", type=Path, metavar="DIR", help="a bundle, as levelbook pack makes it")
    sub.add_argument("port", metavar="PORT", help="the board's serial port, like /dev/ttyACM0 or COM5")
    sub = tank(
        add("send", _send, "settings and calibration to a logger in the field", 'site.toml north --every "30 s" --wait 600')
    )
    for name, help in (("every", "between readings"), ("report", "between reports")):
        sub.add_argument(f"--{name}", metavar="TIME", help=f'{help}, like "60 s" or "5 min"')
    sub.add_argument("--fast", metavar="LENGTH", help='a change of level that is reported at once, like "5 cm"')
    sub.add_argument("--wait", type=float, default=0.0, metavar="SECONDS", help="wait so long for the logger's answer")
    sub = site(
        add("quarantine", _quarantine, "what came and could not be taken: list it, try it again, drop it", "site.toml list")
    )
    sub.add_argument(
        "what",
        choices=("list", "retry", "drop"),
        help="list: what is there and why; retry: after mending the site file; drop: for good",
    )
    sub.add_argument(
        "ids", nargs="*", type=int, metavar="ID", help="only these, by the numbers that list shows (drop wants at least one)"
    )
    sub = site(add("gaps", _gaps, "readings that loggers took and the book does not have", "site.toml"))
    sub.add_argument("--tank", metavar="T", action="append", help="only this tank; may be given again")
    sub.add_argument("--each", action="store_true", help="a line a gap, not a summary a tank")
    return parser


def _version() -> str:
    from importlib.metadata import PackageNotFoundError, version

    try:
        return f"levelbook {version('levelbook')}"
    except PackageNotFoundError:
        return "levelbook, not installed"


def _demo(args: argparse.Namespace) -> int:
    from companion.demo import run_demo

    return run_demo(args.out, args.seconds)


def _check(args: argparse.Namespace) -> int:
    from companion.settings.describe import describe

    print("\n".join(describe(_site(args))))
    return 0


def _convert(args: argparse.Namespace) -> int:
    from companion.figures.convert import convert
    from companion.figures.table import write_figures

    tank = _tank(args)
    frame, rejects = _readings(args, tank)
    write_figures(args.output, convert(tank, frame))
    return _told(args, rejects, len(frame), "converted")


def _load(args: argparse.Namespace) -> int:
    from companion.book.readings import Rejects
    from companion.book.store import open_book

    site, tank = _site(args), _tank(args)
    frame, rejects = _readings(args, tank)
    with open_book(site.store_url) as book:
        added = book.add(tank.name, frame)
        book.seal()
    print(f"{tank.name}: {added.new} new readings, {added.repeated} already in the book", file=sys.stderr)
    status = _told(args, rejects, len(frame), "read")
    if len(added.conflicts):
        clash = Rejects(rejects.source)
        clash.rows = [
            (0, "the book has another reading of this identity", ",".join(map(str, row))) for row in added.conflicts.to_numpy()
        ]
        path = _beside(args.readings, "conflicts")
        clash.write(path)
        status = _said(
            f"{rejects.source}: {len(clash.rows)} readings differ from what the book has of them; they are in {path}", 1
        )
    return status


def _export(args: argparse.Namespace) -> int:
    from companion.book.readings import write_readings
    from companion.book.store import open_book

    site, tank = _site(args), _tank(args)
    start, end = _span(site, args)
    with open_book(site.store_url, create=False) as book:
        write_readings(args.output, book.readings(tank.name, start, end))
    return 0


def _daily(args: argparse.Namespace) -> int:
    from companion.papers.daily import write_daily

    site = _site(args)
    first, last = _day(args.start, "--from"), _day(args.end, "--to")
    if last < first:
        raise WrongUse(f"--from {first} is after --to {last}; write the earlier day first")
    if Path(args.output).suffix.lower() in (".xlsx", ".pdf"):
        raise WrongUse(
            f"-o {args.output}: the daily log is written as CSV so far; name it {Path(args.output).with_suffix('.csv')}"
        )
    tanks = [_known(site, name) for name in args.tank] if args.tank else list(site.tanks.values())
    write_daily(args.output, site, tanks, first, last)
    return 0


def _trend(args: argparse.Namespace) -> int:
    from companion.book.store import open_book
    from companion.figures.convert import convert
    from companion.papers.trend import draw_trend

    site, tank = _site(args), _tank(args)
    start, end = _span(site, args)
    with open_book(site.store_url, create=False) as book:
        figures = convert(tank, book.readings(tank.name, start, end))
    draw_trend(site, tank, figures, start, end, Path(args.output))
    return 0


def _listen(args: argparse.Namespace) -> int:
    from companion.intake.listen import listen

    return listen(_site(args))


def _quarantine(args: argparse.Namespace) -> int:
    from companion.book.store import open_book
    from companion.intake.quarantine import one_line, retry

    site = _site(args)
    with open_book(site.store_url, create=False) as book:
        if args.what == "retry":
            tried = retry(site, book, args.ids)
            print(f"{tried.readings} new readings; {tried.refused} payloads are still refused")
            return int(tried.refused > 0)
        if args.what == "drop":
            if not args.ids:
                raise WrongUse("quarantine drop: name what to drop by the numbers that levelbook quarantine SITE list shows")
            with book.change():
                print(f"{book.aside.drop(args.ids)} payloads dropped")
            return 0
        for entry in book.aside.entries(args.ids):
            times = f", {entry.times} times" if entry.times > 1 else ""
            print(one_line(f"{entry.id}  {entry.arrived:%Y-%m-%dT%H:%M:%SZ}  {entry.topic}{times}: {entry.reason}"))
    return 0


def _gaps(args: argparse.Namespace) -> int:
    from companion.book.gaps import summary
    from companion.book.store import open_book

    site = _site(args)
    wanted = [_known(site, name).name for name in args.tank] if args.tank else list(site.tanks)
    with open_book(site.store_url, create=False) as book:
        found = [gap for gap in book.gaps() if gap.tank in wanted]
    lines = [gap.line() for gap in found] if args.each else summary(found)
    print("\n".join(lines) or "no reading is missing")
    return int(bool(found))


def _move(args: argparse.Namespace) -> int:
    site = _site(args)
    _copied(site.store_url, args.to)
    print(f'the copy is proved; to use it write url = "{args.to}" under [store] in {site.path}')
    return 0


def _backup(args: argparse.Namespace) -> int:
    if Path(args.output).exists():
        raise WrongUse(f"-o {args.output}: is there already; name a new file")
    _copied(_site(args).store_url, f"sqlite:{args.output}")
    print(f"{args.output}: the backup is proved")
    return 0


def _restore(args: argparse.Namespace) -> int:
    if not args.backup.is_file():
        raise WrongUse(f"{args.backup}: there is no such file; name a backup")
    _copied(f"sqlite:{args.backup}", _site(args).store_url)
    print("the book is restored, and proved")
    return 0


def _copied(source: str, target: str) -> None:
    """A book copied whole, and what was proved of it."""
    from companion.book.move import move
    from companion.book.store import open_book

    with open_book(source, create=False) as one, open_book(target) as other:
        for proof in move(one, other):
            print(f"{proof.table}: {proof.rows:,} rows, sha256 {proof.digest[:16]}")


def _pack(args: argparse.Namespace) -> int:
    from companion.field.pack import pack

    site, tank = _site(args), _tank(args)
    full = float(tank.periods()[-1].strapping.volumes_m3[-1])
    most = None
    if args.error is not None:
        share = "%" in args.error
        most = _read(args.error, "share" if share else "volume", "--error") * (full if share else 1.0)
        if most < 0:
            raise WrongUse(f"--error {args.error}: must be 0 or more")
    options = [*(["-c", args.micropython] if args.micropython else []), *([f"-march={args.arch}"] if args.arch else [])]
    print("\n".join(pack(site, tank, Path(args.output), args.main, most, options).lines()))
    return 0


def _flash(args: argparse.Namespace) -> int:
    from companion.field.flash import flash

    written = flash(args.folder, args.port, lambda line: print(line, file=sys.stderr))
    print(f"{args.port}: {written} files written, all proved by their hashes; spool, settings and secrets are as they were")
    return 0


def _send(args: argparse.Namespace) -> int:
    from companion.field.send import message, send

    site, tank = _site(args), _tank(args)
    told = {"every_s": (args.every, "time"), "report_s": (args.report, "time"), "fast_m": (args.fast, "length")}
    changed = {name: _read(text, kind, name) for name, (text, kind) in told.items() if text is not None}
    print(send(site, tank.name, message(site, tank.name, **changed), args.wait))
    return 0


def _read(text: str, dimension: str, option: str) -> float:
    from companion.units import QuantityError, read

    try:
        return read(text, dimension)
    except QuantityError as error:
        raise WrongUse(f"{option}: {error}") from None


def _site(args: argparse.Namespace) -> Site:
    from companion.settings.site import load_site

    if not Path(args.site).is_file():
        raise WrongUse(f"{args.site}: there is no such site file; name one, or see configs/ for an example")
    return load_site(args.site)


def _tank(args: argparse.Namespace) -> TankSettings:
    return _known(_site(args), args.tank)


def _known(site: Site, name: str) -> TankSettings:
    if name not in site.tanks:
        raise WrongUse(f"{site.path}: there is no tank '{name}'; its tanks are {', '.join(site.tanks)}")
    return site.tanks[name]


def _readings(args: argparse.Namespace, tank: TankSettings) -> tuple[pd.DataFrame, Rejects]:
    from companion.book.readings import read_csv

    if args.readings != "-" and not Path(args.readings).is_file():
        raise WrongUse(f"{args.readings}: there is no such file; name a CSV of readings, or - for standard input")
    limits = [sensor.counts_limits for sensor in tank.sensors if sensor.counts_limits is not None]
    widest = (min(least for least, _ in limits), max(most for _, most in limits)) if len(limits) == len(tank.sensors) else None
    return read_csv(args.readings, tank.sensors[-1].signal, widest)


def _told(args: argparse.Namespace, rejects: Rejects, taken: int, done: str) -> int:
    """Say what of a readings file was not taken, and put it where it can be mended."""
    if rejects.repeated:
        _said(f"{rejects.source}: {rejects.repeated} rows repeat earlier ones and were left out", 0)
    if rejects.out_of_order:
        _said(f"{rejects.source}: {rejects.out_of_order} rows were out of order and were sorted by time", 0)
    if not rejects.rows:
        return 0
    path = _beside(args.readings, "rejects")
    rejects.write(path)
    line, reason, _ = rejects.rows[0]
    return _said(
        f"{rejects.source}: {taken} rows {done}, {len(rejects.rows)} rejected to {path}; the first: line {line}: {reason}", 1
    )


def _beside(readings: str, word: str) -> Path:
    return Path(f"{word}.csv") if readings == "-" else Path(readings).with_suffix(f".{word}.csv")


def _span(site: Site, args: argparse.Namespace) -> tuple[datetime, datetime]:
    start, end = _moment(site, args.start, "--from"), _moment(site, args.end, "--to")
    if end <= start:
        raise WrongUse(f"--from {args.start} is not before --to {args.end}; write the earlier one first")
    return start, end


def _moment(site: Site, text: str, option: str) -> datetime:
    """A moment in UTC; a bare date is its local midnight, for --to the midnight that ends it."""
    from companion.papers.daily import local_midnight

    if re.fullmatch(r"\d{4}-\d\d-\d\d", text):
        return local_midnight(_day(text, option) + timedelta(days=option == "--to"), site.timezone)
    try:
        moment = datetime.fromisoformat(text)
    except ValueError:
        raise WrongUse(f"{option} {text}: write a day like 2026-03-01 or a moment like 2026-03-01T06:00:00Z") from None
    if moment.tzinfo is None:
        raise WrongUse(f"{option} {text}: has no zone; write {text}Z for UTC, or with an offset like +02:00")
    return moment.astimezone(UTC)


def _day(text: str, option: str) -> date:
    try:
        return date.fromisoformat(text)
    except ValueError:
        raise WrongUse(f"{option} {text}: write a day like 2026-03-01") from None
