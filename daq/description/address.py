"""Address: where a device is; what no device can stand at is found before anybody is asked."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from typing import Annotated

from pydantic import AfterValidator

_NET = re.compile(r"(?:tcp|socket|rfc2217)://[^\s:/?]+:(?P<port>\d+)")
_SERIAL = re.compile(r"serial:[^\s?]+(?:\?(?P<settings>\S*))?")
_VISA = re.compile(r"visa:\S+")
_SETTINGS: Mapping[str, str] = {
    "baud": r"[1-9]\d{1,7}",
    "bits": "[5-8]",
    "parity": "[NEOMS]",
    "stop": r"1|1\.5|2",
}
_FORMS = "tcp://host:port, socket://host:port, rfc2217://host:port, serial:/dev/name?baud=9600 or visa:..."


def address_problem(text: str) -> str:
    """Return why no device can stand at an address, "" when one can."""
    if net := _NET.fullmatch(text):
        return "" if int(net["port"]) < 65536 else "no port has a number above 65535"
    if line := _SERIAL.fullmatch(text):
        return _settings_problem(line["settings"] or "")
    return "" if _VISA.fullmatch(text) else f"an address is {_FORMS}"


def same_place(addresses: Mapping[str, str]) -> Iterator[tuple[str, str]]:
    """Yield (key, text) for every device that stands where another one does; a port 0 is any free one."""
    first: dict[str, str] = {}
    for name, address in addresses.items():
        if first.setdefault(address, name) != name and not address.endswith(":0"):
            yield f"devices.{name}.address", f"device {first[address]!r} stands at {address} too"


def _settings_problem(settings: str) -> str:
    for setting in settings.split("&") if settings else ():
        key, _, value = setting.partition("=")
        if key not in _SETTINGS:
            return f"a serial port has no setting {key!r}; it has {', '.join(_SETTINGS)}"
        if not re.fullmatch(_SETTINGS[key], value):
            return f"{value!r} is no value for {key} of a serial port"
    return ""


def _sound(text: str) -> str:
    if problem := address_problem(text):
        raise ValueError(problem)
    return text


Address = Annotated[str, AfterValidator(_sound)]
