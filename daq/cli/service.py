"""Commands of the service: serve, book, bookings."""

from __future__ import annotations

import argparse
import getpass
import sys
import threading
import time
from collections.abc import Sequence
from contextlib import ExitStack
from datetime import UTC, datetime
from pathlib import Path

from daq.cli.answer import Answer
from daq.cli.night import interrupts, show_page
from daq.cli.plan import wishes
from daq.errors import DaqError, DescriptionError
from daq.records import TASKS
from daq.service.arming import checks, confirm
from daq.service.bookings import Booking, bookings, cancel
from daq.service.bookings import book as booked
from daq.service.load import load
from daq.service.messages import by_apprise
from daq.service.owner import owned
from daq.service.serve import serve as served
from daq.service.settings import settings_of, with_secrets
from daq.service.silence import Listener, listening
from daq.storage.lab import there
from daq.storage.lab_book import select

LISTEN_EVERY_S = 0.5


def serve(arguments: argparse.Namespace) -> Answer:
    """Own a lab: start what is booked, show the page, until Ctrl-C."""
    stream = sys.stderr if arguments.json else sys.stdout

    def say(text: str) -> None:
        print(f"{datetime.now(UTC):%Y-%m-%d %H:%M} UTC  {text}", file=stream, flush=True)

    with ExitStack() as stack:
        asked = stack.enter_context(interrupts())
        stack.enter_context(owned(arguments.lab))  # before anything is promised
        if not arguments.no_page:
            show_page(stack, arguments.lab, stream, _page_options(arguments))
        done = served(arguments.lab, asked, say)
    return Answer(0, done, [f"runs started: {done['started']}; gone on with: {done['resumed']}"])


def _page_options(arguments: argparse.Namespace) -> list[str]:
    """Return where the page listens, in the page's own words; off this computer it asks for passwords."""
    options = ["--host", arguments.host, "--port", str(arguments.port)]
    for name in arguments.name:
        options += ["--name", name]
    return [*options, "--behind-proxy"] if arguments.behind_proxy else options


def listen(arguments: argparse.Namespace) -> Answer:
    """On a second machine: speak up when no heartbeat has come for some time, until Ctrl-C."""
    token = with_secrets(arguments.token)
    if not token and arguments.host not in ("127.0.0.1", "::1", "localhost"):
        text = f"--host {arguments.host}: off this computer a heartbeat needs a token: --token '${{NAME}}'."
        raise DescriptionError((text,))
    addresses = [with_secrets(address) for address in arguments.to]
    listener = Listener(60 * arguments.after_min, time.monotonic())
    try:
        server = listening(arguments.host, arguments.port, token, listener, time.monotonic)
    except OSError as error:
        raise DaqError(f"cannot listen ({error})", where=f"{arguments.host}:{arguments.port}") from error
    threading.Thread(target=server.serve_forever, daemon=True).start()
    print(f"listening at http://{arguments.host}:{server.server_address[1]}/", file=sys.stderr, flush=True)
    with interrupts() as asked, server:
        while not asked.leave:
            time.sleep(LISTEN_EVERY_S)
            said = listener.look(time.monotonic())
            if said:
                print(f"{datetime.now(UTC):%Y-%m-%d %H:%M} UTC  {said}", file=sys.stderr, flush=True)
                failed = by_apprise(addresses, "tercet: heartbeat", said) if addresses else ""
                print(failed, end="\n" if failed else "", file=sys.stderr, flush=True)
        server.shutdown()
    return Answer(0, {"silent": listener.silent}, [])


def arm(arguments: argparse.Namespace) -> Answer:
    """Check everything, ask the cautions one by one, and arm one start within 24 hours."""
    loaded = load(arguments.file)
    if loaded.rig.simulated:
        text = "Every device of this rig is simulated: it needs no arming."
        return Answer(0, {"ok": True, "armed": False, "problems": []}, [text])
    messages = settings_of(arguments.lab).messages
    without = _reasons(arguments.without)
    found = checks(loaded, arguments.lab, messages, without)
    for one in found:
        print(f"{'ok ' if one.ok else 'NOT'}  {one.what}: {one.seen}", file=sys.stderr)
    problems = [f"{one.what}: {one.seen}" for one in found if not one.ok]
    if not problems and messages is not None:
        who = arguments.by or getpass.getuser()
        reason = confirm(loaded, arguments.lab, messages, who, _typed, without=without)
        problems = [reason] if reason else []
    if problems:
        return Answer(1, {"ok": False, "armed": False, "problems": problems}, ["Not armed.", *problems])
    armed = "Armed for one start within 24 hours. This is no safety function."
    return Answer(0, {"ok": True, "armed": True, "problems": []}, [armed])


def _reasons(without: Sequence[str]) -> dict[str, str]:
    """Return task -> reason; every one is a task and has a reason."""
    parted = [one.partition("=") for one in without]
    wrong = [task for task, _, reason in parted if task not in TASKS or not reason.strip()]
    if wrong:
        raise DescriptionError(
            (f"--without {wrong[0]}: give TASK=REASON, a task of {', '.join(TASKS)} and a reason in words.",)
        )
    return {task: reason.strip() for task, _, reason in parted}


def _typed(question: str) -> str:
    """Return what a person types; there is no switch that answers instead."""
    print(question, end="", file=sys.stderr, flush=True)
    return sys.stdin.readline().rstrip("\n")


def book(arguments: argparse.Namespace) -> Answer:
    """Book an unattended start, once or recurring."""
    zone = arguments.zone or _local_zone()
    today = datetime.now().astimezone().date().isoformat()
    made = booked(
        arguments.lab,
        arguments.file,
        days=arguments.on.split(","),
        at=arguments.at,
        zone=zone,
        first_day=arguments.first_day or today,
        late_s=60 * arguments.late_min,
        end_at=arguments.end_by,
        wishes=wishes(arguments),
        who=arguments.by or getpass.getuser(),
    )
    lines = [f"booked as {made.number}; {_when(made)}", _what_it_will_be(made, arguments.lab)]
    return Answer(0, _figures(made), lines)


def _what_it_will_be(made: Booking, lab: Path) -> str:
    """Return what nobody should be surprised by at the start."""
    if load(made.file, made.wishes).rig.simulated:
        return (
            "Every device of its rig is simulated: it will be a rehearsal in virtual time, over in a minute."
        )
    return f"Every start has to be armed within 24 h before it: tercet arm {lab} {made.file}"


def list_bookings(arguments: argparse.Namespace) -> Answer:
    """List the bookings of a lab and what became of them, or cancel one."""
    there(arguments.lab)
    if arguments.cancel is not None:
        cancel(arguments.lab, arguments.cancel)
    found = bookings(arguments.lab)
    starts = select(arguments.lab, "starts")
    lines = [_line(one) for one in found] or ["nothing is booked"]
    lines += [f"  {start['due_utc']}  booking {start['booking']}: {start['outcome']}" for start in starts]
    return Answer(0, {"bookings": [_figures(one) for one in found], "starts": starts}, lines)


def _line(one: Booking) -> str:
    days = ",".join(one.times.days)
    return f"{one.number}  {one.file.name}  {days} {one.times.at:%H:%M}  {_when(one)}"


def _figures(one: Booking) -> dict[str, object]:
    following = one.next_start(datetime.now(UTC))
    return {
        "booking": one.number,
        "file": str(one.file),
        "next_utc": None if following is None else following.isoformat(),
        "zone": one.times.zone.key,
        "who": one.who,
    }


def _when(one: Booking) -> str:
    following = one.next_start(datetime.now(UTC))
    if following is None:
        return "no further start"
    local = following.astimezone(one.times.zone)
    return f"next start {local:%Y-%m-%d %H:%M} {one.times.zone.key} ({following:%H:%M} UTC)"


def _local_zone() -> str:
    """Return the name of the machine's time zone, UTC when it has no name that others know."""
    from tzlocal import get_localzone_name

    return str(get_localzone_name() or "UTC")
