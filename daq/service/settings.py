"""Settings of a lab: where messages and heartbeats go, from `lab.toml`; no secret stands in it."""

from __future__ import annotations

import os
import re
import tomllib
from datetime import time
from pathlib import Path
from typing import Annotated
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from pydantic import Field, ValidationError, ValidationInfo, field_validator, model_validator

from daq.description.problems import Table, every_problem
from daq.errors import DescriptionError

SETTINGS = "lab.toml"
_SECRET = re.compile(r"\$\{(?:(?P<ring>keyring):(?P<service>[^/}]+)/(?P<user>[^}]+)|(?P<name>\w+))\}")
_PASSWORD_IN_PLACE = re.compile(r"://[^/?@\s]*:(?!\$\{)[^/?@\s]+@|[?&](pass|password|token)=(?!\$\{)", re.I)


class Messages(Table):
    """Where messages go: `urgent` at once, within limits; everything else in the morning's digest.

    `evening_at`: when "armed and well" is said before a night with a run in it; "" for never.

    An address is a URL as the library apprise knows it, like "mailto://host:587?from=...&to=...".
    """

    urgent: Annotated[tuple[str, ...], Field(min_length=1)]
    digest: tuple[str, ...] = ()
    digest_at: str = "08:00"
    evening_at: str = "22:00"
    zone: str = "UTC"
    an_hour: Annotated[int, Field(ge=1, le=60)] = 3
    a_night: Annotated[int, Field(ge=1, le=100)] = 6

    @field_validator("digest_at", "evening_at")
    @classmethod
    def _is_a_time(cls, value: str, info: ValidationInfo) -> str:
        if value or info.field_name == "digest_at":
            time.fromisoformat(value)
        return value

    @field_validator("zone")
    @classmethod
    def _is_a_zone(cls, value: str) -> str:
        try:
            ZoneInfo(value)
        except (ZoneInfoNotFoundError, ValueError) as error:
            raise ValueError("name a time zone like Europe/Berlin") from error
        return value

    @model_validator(mode="after")
    def _hold_no_secret(self) -> Messages:
        if any(_PASSWORD_IN_PLACE.search(address) for address in (*self.urgent, *self.digest)):
            raise ValueError("write a password as ${NAME} (environment) or ${keyring:SERVICE/USER}")
        return self


class Heartbeat(Table):
    """Where a sign of life goes: an HTTP address, and the word that its listener asks for."""

    address: Annotated[str, Field(pattern=r"^https?://\S+$")]
    token: Annotated[str, Field(pattern=r"^(|\$\{.+\})$")] = ""
    every_s: Annotated[float, Field(ge=1, le=3600)] = 300.0


class LabSettings(Table):
    """The settings of a lab."""

    messages: Messages | None = None
    heartbeat: Heartbeat | None = None


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


def with_secrets(text: str) -> str:
    """Return a text with every ${NAME} and ${keyring:SERVICE/USER} filled in.

    Raises
    ------
    DescriptionError
        For one that nobody has set.
    """
    return _SECRET.sub(_secret, text)


def _secret(found: re.Match[str]) -> str:
    value = _from_keyring(found) if found["ring"] else os.environ.get(found["name"])
    if value is None:
        raise DescriptionError((f"{SETTINGS}: nobody has set {found[0]}. Set it where the service starts.",))
    return value


def _from_keyring(found: re.Match[str]) -> str | None:
    try:
        import keyring
    except ImportError as error:
        text = f"{SETTINGS}: {found[0]} needs the package keyring. Install it, or use ${{NAME}}."
        raise DescriptionError((text,)) from error
    return keyring.get_password(found["service"], found["user"])
