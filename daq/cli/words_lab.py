"""The words of a lab: service, bookings, runs that are going on, people."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any

from daq.cli.words_shared import RUN, add, wishes
from daq.records import ROLES


def service_words(commands: Any) -> None:
    """Add the commands of the service and of what it starts."""
    lab = "own a lab and start what is booked"
    serve = add(commands, "serve", "service:serve", lab, "tercet serve lab")
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
    book = add(commands, "book", "service:book", start, example)
    became = "list bookings and what became of them"
    listing = add(commands, "bookings", "service:list_bookings", became, "tercet bookings lab")
    checked = "check everything, ask the cautions, and arm one unattended start"
    arm = add(commands, "arm", "service:arm", checked, "tercet arm lab lantern.toml")
    for one in (serve, book, listing, arm):
        one.add_argument("lab", type=Path, metavar="LAB", help="the lab folder")
    _booking_words(book)
    silence = "on a second machine: speak up when the heartbeat of a service stops"
    example = "tercet listen --host 0.0.0.0 --token '${HEARTBEAT}' --to 'mailto://...'"
    listen = add(commands, "listen", "service:listen", silence, example)
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
    wishes(book)


def watch_words(commands: Any) -> None:
    """Add the commands for a run that is going on."""
    newest = "say how a run of a lab is getting on"
    status = add(commands, "status", "watch:status", newest, "tercet status lab")
    pause = "ask a run to hold before its next stand"
    hold = add(commands, "hold", "watch:hold", pause, "tercet hold lab")
    resume = add(commands, "resume", "watch:resume", "ask a run that holds to go on", "tercet resume lab")
    stop = "ask a run to end after this stand"
    end = add(commands, "end", "watch:end", stop, "tercet end lab --after-lap")
    seen = "say that you have seen the warnings of a run, or call nobody for some time"
    acknowledge = add(commands, "acknowledge", "watch:acknowledge", seen, "tercet acknowledge lab level-1")
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
    log = add(commands, "log", "watch:log", "print what happened in a run", f"tercet log {RUN}")
    log.add_argument("run", type=Path, metavar="RUN", help="a run folder")


def people_words(commands: Any) -> None:
    """Add the command of the people."""
    who = "say who may log in to the page of a lab"
    people = add(
        commands, "people", "people:people", who, "tercet people lab add 'Night watch' --role watcher"
    )
    people.add_argument("lab", type=Path, metavar="LAB", help="the lab folder")
    acts = ("list", "add", "password", "remove", "end-sessions")
    people.add_argument("do", nargs="?", choices=acts, default="list", help="what to do (list)")
    people.add_argument("name", nargs="?", metavar="NAME", help="whom (end-sessions: everybody)")
    roles = "a watcher reads, an operator also asks (watcher)"
    people.add_argument("--role", choices=ROLES, default="watcher", help=roles)
