"""The words of the command line: commands, options, and an example for each."""

from __future__ import annotations

import argparse
from collections.abc import Callable
from importlib import import_module
from pathlib import Path
from typing import Any

from daq.cli.answer import Answer
from daq.records import ROLES, TASKS, VERDICTS

RUN = "lab/runs/20261201T170000Z-lantern"
ABOUT = """Plans and runs multi-mask interference scans, loses no count, and gives a residual that can be
defended.

The software holds and stops here are requests over data links. They are no safety functions."""


def parser() -> argparse.ArgumentParser:
    """Return the parser of the whole command line."""
    whole = argparse.ArgumentParser(
        prog="tercet",
        description=ABOUT,
        formatter_class=argparse.RawDescriptionHelpFormatter,
        epilog="example: tercet rehearse --page    a whole simulated night with the live page",
    )
    commands = whole.add_subparsers(title="commands", required=True, metavar="COMMAND")
    _plan_words(commands)
    _night_words(commands)
    _replay_words(commands)
    _task_words(commands)
    _service_words(commands)
    _watch_words(commands)
    _after_words(commands)
    _people_words(commands)
    _blind_words(commands)
    _scale_words(commands)
    return whole


def _plan_words(commands: Any) -> None:
    check = _add(
        commands,
        "check",
        "plan:check",
        "read a description and list every problem",
        "tercet check lantern.toml",
    )
    check.add_argument("file", type=Path, metavar="FILE", help="a measurement, a rig or a dialect (TOML)")
    check.add_argument(
        "--try", dest="address", metavar="HOST:PORT", help="talk to a device in this dialect, asking only"
    )
    check.add_argument("--letter", default="X", help="the axis of a stage controller that is asked (X)")
    compose = _add(
        commands,
        "compose",
        "compose:compose",
        "plan a run: the order, the error bar to come, and what would make it smaller",
        "tercet compose lantern.toml --hours 8 --picture plan.svg --write tonight.toml",
    )
    compose.add_argument("file", type=Path, metavar="FILE", help="a measurement (TOML)")
    _wishes(compose)
    compose.add_argument(
        "--write", type=Path, metavar="PLAN", help="write a measurement that pins every choice, for run"
    )
    records = "take the newest valid bench records of this lab, and say which"
    compose.add_argument("--bench", type=Path, metavar="LAB", help=records)
    compose.add_argument(
        "--picture", type=Path, metavar="FILE", help="draw the plan; the name ends in .svg, .png or .pdf"
    )


def _night_words(commands: Any) -> None:
    rehearse = _add(
        commands,
        "rehearse",
        "night:rehearse",
        "carry out a whole run on simulated hardware in virtual time",
        "tercet rehearse --hours 2 --seed 7 --page",
    )
    rehearse.add_argument(
        "file", type=Path, nargs="?", metavar="FILE", help="a measurement; the Lantern night when left out"
    )
    _wishes(rehearse)
    _link(rehearse)
    _folders(rehearse)
    twin = "a simulated rig in the place of the measurement's own: the rehearsal that arming asks for"
    rehearse.add_argument("--rig", type=Path, metavar="RIG", help=twin)
    script = "a fault script: what goes wrong on the simulated bench, and when"
    rehearse.add_argument("--faults", type=Path, metavar="FILE", help=script)
    source = (
        "let the source drift as the description's pilot says (pilot), or as it did in a run (its folder)"
    )
    rehearse.add_argument("--drift", metavar="PILOT", help=source)
    rehearse.add_argument(
        "--page", action="store_true", help="show the live page; on a terminal it stays until Ctrl-C"
    )
    run = _add(
        commands,
        "run",
        "night:run",
        "start a run now, in the foreground, on the real clock",
        "tercet run lantern.toml --into lab",
    )
    run.add_argument("file", type=Path, nargs="?", metavar="FILE", help="a measurement (TOML)")
    _wishes(run)
    _folders(run)
    run.add_argument(
        "--home", action="store_true", help="home axes that lost their reference (look at the bench first)"
    )
    run.add_argument("--page", action="store_true", help="show the live page while the run goes on")


def _task_words(commands: Any) -> None:
    """Add the bench tasks."""
    what = "do a guided task at the bench: by-hand (home, go, read, the rate as a bar), or one that measures"
    task = _add(commands, "task", "task:task", what, "tercet task dark lantern.toml --into lab")
    task.add_argument(
        "name", choices=("by-hand", *TASKS), metavar="NAME", help=", ".join(("by-hand", *TASKS))
    )
    task.add_argument("file", type=Path, metavar="FILE", help="a measurement (by-hand: a rig; TOML)")
    task.add_argument("--into", type=Path, default=Path("lab"), metavar="LAB", help="lab folder (./lab)")
    task.add_argument("--by", metavar="NAME", help="who does it (your login name)")


def _replay_words(commands: Any) -> None:
    again = "play an archived run again through simulated instruments, as it was or with something changed"
    example = f"tercet replay {RUN} --set estimate.dead_time_s=50e-9"
    replay = _add(commands, "replay", "again:replay", again, example)
    replay.add_argument("run", type=Path, metavar="RUN", help="a run folder")
    _into(replay)
    _link(replay)
    speed = "so many times as fast as the wall clock, 1 to 100 (as fast as it goes)"
    replay.add_argument("--speed", type=float, metavar="TIMES", help=speed)
    change = "change a key of its description, like quality.fingerprint_p=1e-6; may be given again"
    replay.add_argument(
        "--set", dest="changes", action="append", default=[], metavar="KEY=VALUE", help=change
    )
    replay.add_argument("--faults", type=Path, metavar="FILE", help="a fault script to lay over it")
    replay.add_argument("--page", action="store_true", help="show the live page meanwhile")
    foreign = "take in a table of visits that was made elsewhere (CSV), as a finished run"
    example = "tercet import visits.csv visits-elsewhere.toml --into lab"
    taken = _add(commands, "import", "again:take_in", foreign, example)
    taken.add_argument("table", type=Path, metavar="TABLE", help="a CSV file, one line a visit")
    taken.add_argument("mapping", type=Path, metavar="MAPPING", help="which column is what (TOML)")
    _into(taken)


def _service_words(commands: Any) -> None:
    lab = "own a lab and start what is booked"
    serve = _add(commands, "serve", "service:serve", lab, "tercet serve lab")
    serve.add_argument("--no-page", action="store_true", help="do not show the page")
    where = (
        "address that the page listens on (this computer alone); others need passwords, see `tercet people`"
    )
    serve.add_argument("--host", default="127.0.0.1", help=where)
    serve.add_argument("--port", type=int, default=8347, help="port of the page; 0 takes a free one (8347)")
    called = "a name by which others call this computer (repeatable)"
    serve.add_argument("--name", action="append", default=[], help=called)
    proxy = "a TLS proxy on this computer passes requests to the page on"
    serve.add_argument("--behind-proxy", action="store_true", help=proxy)
    start = "book an unattended start, once or recurring"
    example = "tercet book lab lantern.toml --at 18:30 --on mon,fri --end-by 08:00"
    book = _add(commands, "book", "service:book", start, example)
    became = "list bookings and what became of them"
    listing = _add(commands, "bookings", "service:list_bookings", became, "tercet bookings lab")
    checked = "check everything, ask the cautions, and arm one unattended start"
    arm = _add(commands, "arm", "service:arm", checked, "tercet arm lab lantern.toml")
    for one in (serve, book, listing, arm):
        one.add_argument("lab", type=Path, metavar="LAB", help="the lab folder")
    _booking_words(book)
    silence = "on a second machine: speak up when the heartbeat of a service stops"
    example = "tercet listen --host 0.0.0.0 --token '${HEARTBEAT}' --to 'mailto://...'"
    listen = _add(commands, "listen", "service:listen", silence, example)
    listen.add_argument("--host", default="127.0.0.1", help="address to listen on (this computer alone)")
    listen.add_argument("--port", type=int, default=8348, help="port to listen on; 0 takes a free one (8348)")
    listen.add_argument("--after-min", type=float, default=10.0, metavar="MIN", help="speak up after (10)")
    secret = "the word that a heartbeat has to bring, as ${NAME} from the environment"
    listen.add_argument("--token", default="", help=secret)
    where = "where messages go, as the library apprise writes it (repeatable)"
    listen.add_argument("--to", action="append", default=[], metavar="ADDRESS", help=where)
    arm.add_argument("file", type=Path, metavar="FILE", help="a measurement (TOML)")
    arm.add_argument("--by", metavar="NAME", help="who arms (your login name)")
    reason = "do without a valid bench record, and why (repeatable)"
    arm.add_argument("--without", action="append", default=[], metavar="TASK=REASON", help=reason)
    listing.add_argument("--cancel", type=int, metavar="N", help="cancel booking N")


def _booking_words(book: argparse.ArgumentParser) -> None:
    book.add_argument("file", type=Path, metavar="FILE", help="a measurement (TOML)")
    book.add_argument("--at", required=True, metavar="HH:MM", help="local time of the start")
    days = "once, daily, or weekdays like mon,fri (once)"
    book.add_argument("--on", default="once", metavar="DAYS", help=days)
    book.add_argument("--first-day", metavar="DATE", help="not before this day (today)")
    book.add_argument("--zone", help="time zone of the times, like Europe/Berlin (this machine's)")
    book.add_argument("--end-by", metavar="HH:MM", help="end no later than this local time")
    late = "start at most so late (60)"
    book.add_argument("--late-min", type=float, default=60.0, metavar="MIN", help=late)
    book.add_argument("--by", metavar="NAME", help="who books (your login name)")
    _wishes(book)


def _watch_words(commands: Any) -> None:
    newest = "say how a run of a lab is getting on"
    status = _add(commands, "status", "watch:status", newest, "tercet status lab")
    pause = "ask a run to hold before its next stand"
    hold = _add(commands, "hold", "watch:hold", pause, "tercet hold lab")
    resume = _add(commands, "resume", "watch:resume", "ask a run that holds to go on", "tercet resume lab")
    stop = "ask a run to end after this stand"
    end = _add(commands, "end", "watch:end", stop, "tercet end lab --after-lap")
    seen = "say that you have seen the warnings of a run, or call nobody for some time"
    acknowledge = _add(commands, "acknowledge", "watch:acknowledge", seen, "tercet acknowledge lab level-1")
    for one in (status, hold, resume, end, acknowledge):
        one.add_argument("lab", type=Path, metavar="LAB", help="the lab folder")
        one.add_argument("--run", metavar="NAME", help="a run of the lab (the one that goes on)")
    acknowledge.add_argument("warning", nargs="?", metavar="WARNING", help="its name (every one)")
    acknowledge.add_argument("--mute-min", type=float, metavar="MIN", help="call nobody for so many minutes")
    resume.add_argument(
        "--at-bench", action="store_true", help="clear a hold that only a person at the bench may clear"
    )
    resume.add_argument("--home", action="store_true", help="with --at-bench: home axes without a reference")
    for one in (hold, resume, end, acknowledge):
        one.add_argument("--by", metavar="NAME", help="who asks (your login name)")
    end.add_argument("--after-lap", action="store_true", help="end at the edge of a lap, not of a stand")
    log = _add(commands, "log", "watch:log", "print what happened in a run", f"tercet log {RUN}")
    log.add_argument("run", type=Path, metavar="RUN", help="a run folder")


def _scale_words(commands: Any) -> None:
    many = "draw many nights, made up or rehearsed, and tell what they say"
    study = _add(commands, "study", "study:study", many, "tercet study studies/coverage.toml --workers 2")
    study.add_argument("file", type=Path, metavar="FILE", help="a study (TOML)")
    study.add_argument("--draws", type=int, metavar="N", help="how many draws (as described)")
    study.add_argument("--block", type=int, metavar="N", help="draws a worker gets at once (as described)")
    study.add_argument("--into", type=Path, metavar="FOLDER", help="where draws are kept (studies/NAME)")
    _workers(study)
    taken = "estimate archived runs anew and take them together"
    pool = _add(commands, "pool", "pool:pool", taken, "tercet pool lab/runs/*-lantern --picture forest.svg")
    where = "a run folder, a zip of one, or an address like s3://bucket/run.zip"
    pool.add_argument("run", nargs="+", metavar="RUN", help=where)
    pool.add_argument("--picture", type=Path, metavar="FILE", help="draw the forest (.svg, .png or .pdf)")
    pool.add_argument("--into", type=Path, metavar="FOLDER", help="keep the figures of each run there")
    _workers(pool)


def _workers(one: argparse.ArgumentParser) -> None:
    one.add_argument("--workers", type=int, default=0, metavar="N", help="worker processes here; 0: none (0)")
    one.add_argument("--cluster", metavar="ADDRESS", help="a dask scheduler, like tcp://host:8786")


def _blind_words(commands: Any) -> None:
    hide = "hide a run's kappa behind an offset, freeze its analysis, reveal it"
    blind = _add(commands, "blind", "blinding:blind", hide, f"tercet blind {RUN} --freeze")
    blind.add_argument("run", type=Path, metavar="RUN", help="a run folder in its lab")
    blind.add_argument("--scope", default="run", metavar="NAME", help="a campaign with one offset (run)")
    wide = "half width of the offset, like 0.001 (ten times the planned error bar)"
    blind.add_argument("--halfwidth", metavar="NUMBER", help=wide)
    blind.add_argument("--freeze", action="store_true", help="freeze settings and runs of the scope")
    blind.add_argument("--reveal", action="store_true", help="reveal a frozen scope; asks for its name")
    blind.add_argument("--by", metavar="NAME", help="who does it (your login name)")


def _after_words(commands: Any) -> None:
    told = "print the report of a run"
    report = _add(commands, "report", "after:report", told, f"tercet report {RUN}")
    whole = "check every part of a run's archive"
    verify = _add(commands, "verify", "after:verify", whole, f"tercet verify {RUN}")
    bag = "pack a finished run as a bag (RFC 8493) or a zip, or check a bag"
    pack = _add(commands, "pack", "after:pack", bag, f"tercet pack {RUN} --zip")
    table = "write the visits of a run as CSV or NetCDF"
    export = _add(commands, "export", "after:export", table, f"tercet export {RUN} visits.csv")
    said = "add a note to a run's log"
    note = _add(commands, "note", "after:note", said, f"tercet note {RUN} 'door was open at 2'")
    verdict = "add your verdict on a run to its log"
    accept = _add(commands, "accept", "after:accept", verdict, f"tercet accept {RUN} counts")
    for one in (report, verify, pack, export, note, accept):
        one.add_argument("run", type=Path, metavar="RUN", help="a run folder")
    pack.add_argument("--zip", action="store_true", help="one zip that Zarr opens, instead of a bag")
    pack.add_argument("--to", type=Path, metavar="TARGET", help="where to (beside the run)")
    address = "copy it there too, like s3://bucket/folder, and compare"
    pack.add_argument("--copy-to", metavar="ADDRESS", help=address)
    export.add_argument("file", type=Path, metavar="FILE", help="a file that ends in .csv or .nc")
    note.add_argument("text", metavar="TEXT", help="what you saw")
    accept.add_argument("verdict", choices=VERDICTS, help="whether this night counts")
    accept.add_argument("--remark", default="", help="why")
    for one in (pack, export):
        one.add_argument("--raw", action="store_true", help="give raw counts of a blinded run; it is logged")
    for one in (note, accept):
        one.add_argument("--by", metavar="NAME", help="who says so (your login name)")


def _people_words(commands: Any) -> None:
    who = "say who may log in to the page of a lab"
    people = _add(
        commands, "people", "people:people", who, "tercet people lab add 'Night watch' --role watcher"
    )
    people.add_argument("lab", type=Path, metavar="LAB", help="the lab folder")
    acts = ("list", "add", "password", "remove", "end-sessions")
    people.add_argument("do", nargs="?", choices=acts, default="list", help="what to do (list)")
    people.add_argument("name", nargs="?", metavar="NAME", help="whom (end-sessions: everybody)")
    roles = "a watcher reads, an operator also asks (watcher)"
    people.add_argument("--role", choices=ROLES, default="watcher", help=roles)


def _add(commands: Any, name: str, target: str, text: str, example: str) -> argparse.ArgumentParser:
    one: argparse.ArgumentParser = commands.add_parser(
        name, help=text, description=f"{text[:1].upper()}{text[1:]}.", epilog=f"example: {example}"
    )
    one.add_argument("--json", action="store_true", help="print one JSON object last on standard output")
    one.set_defaults(command=_later(target))
    return one


def _later(target: str) -> Callable[[argparse.Namespace], Answer]:
    """Return a command whose module is imported when it is carried out."""
    module, _, function = target.partition(":")

    def command(arguments: argparse.Namespace) -> Answer:
        answer: Answer = getattr(import_module(f"daq.cli.{module}"), function)(arguments)
        return answer

    return command


def _wishes(one: argparse.ArgumentParser) -> None:
    one.add_argument("--hours", type=float, help="length in hours, rounded down to whole pairs of laps")
    one.add_argument("--seed", type=int, help="one seed for the order and for the simulated bench")
    orders = ("zigzag", "searched", "cyclic", "random", "blocked")
    one.add_argument("--order", choices=orders, help="another order than the description's")


def _link(one: argparse.ArgumentParser) -> None:
    how = "how instruments are reached (tcp)"
    one.add_argument("--link", choices=("tcp", "direct"), default="tcp", help=how)


def _into(one: argparse.ArgumentParser) -> None:
    one.add_argument("--into", type=Path, default=Path("lab"), metavar="LAB", help="lab folder (./lab)")


def _folders(one: argparse.ArgumentParser) -> None:
    _into(one)
    one.add_argument(
        "--resume", type=Path, metavar="RUN", help="go on with an interrupted run, after its last count"
    )
