"""Mail: messages to people, kept in the lab book until they are sent; a dead server loses nothing."""

from __future__ import annotations

import os
import smtplib
import tomllib
from email.message import EmailMessage
from pathlib import Path
from typing import Annotated

from pydantic import Field, ValidationError

from daq.description.problems import Table, every_problem
from daq.errors import DescriptionError
from daq.service.requests import utc_now
from daq.storage.lab_book import insert, select, update

SETTINGS = "lab.toml"
TIMEOUT_S = 10.0


class Mail(Table):
    """Where mail goes; the password stands in an environment variable, never in a file."""

    host: str
    port: Annotated[int, Field(gt=0, lt=65536)] = 587
    sender: str
    to: tuple[str, ...]
    tls: bool = True
    user: str = ""
    password_variable: str = "TERCET_MAIL_PASSWORD"


class LabSettings(Table):
    """The settings of a lab."""

    mail: Mail | None = None


def settings_of(lab: Path) -> LabSettings:
    """Return the settings of a lab from `lab.toml`; none when there is no such file.

    Raises
    ------
    DescriptionError
        With every problem of the file.
    """
    path = lab / SETTINGS
    if not path.exists():
        return LabSettings()
    table = {}
    try:
        table = tomllib.loads(path.read_text())
        return LabSettings.model_validate(table)
    except ValidationError as error:
        raise DescriptionError(every_problem(error, LabSettings, table, str(path))) from error
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise DescriptionError((f"{path}: cannot be read: {error}. Mend it there.",)) from error


def post(lab: Path, kind: str, subject: str, body: str) -> int:
    """Leave a message for people in the book of a lab and return its number."""
    return insert(lab, "messages", utc=utc_now(), kind=kind, subject=subject, body=body)


def send_what_waits(lab: Path, mail: Mail | None) -> int:
    """Send every message that waits, oldest first, and return how many went; the first failure stops it."""
    if mail is None:
        return 0
    sent = 0
    for row in select(lab, "messages", "sent_utc IS NULL"):
        try:
            _send(mail, row["subject"], row["body"])
        except (OSError, smtplib.SMTPException) as error:
            update(lab, "messages", row["id"], error=f"{utc_now()} {error}")
            break
        update(lab, "messages", row["id"], sent_utc=utc_now(), error=None)
        sent += 1
    return sent


def _send(mail: Mail, subject: str, body: str) -> None:
    message = EmailMessage()
    message["Subject"], message["From"], message["To"] = subject, mail.sender, ", ".join(mail.to)
    message.set_content(body)
    with smtplib.SMTP(mail.host, mail.port, timeout=TIMEOUT_S) as server:
        if mail.tls:
            server.starttls()
        if mail.user:
            server.login(mail.user, os.environ.get(mail.password_variable, ""))
        server.send_message(message)
