"""Files of the page: colours that can be read, one vendored script of the right version."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from plotly.offline import get_plotlyjs_version

import dashboard

ASSETS = Path(dashboard.__file__).parent / "assets"
STYLE = (ASSETS / "page.css").read_text(encoding="utf-8")
THEMES = {"light": ":root {", "dark": ':root[data-theme="dark"] {'}
TEXT = ("ink", "soft", "added", "taken", "kappa", "fine", "stop", "look-ink")
MARKS = ("edge", "focus", "added", "taken", "kappa", "fine", "stop", "look-ink")


def palette(theme: str) -> dict[str, str]:
    """Return the solid colours of a theme, by name."""
    block = STYLE.split(THEMES[theme], 1)[1].split("}", 1)[0]
    return dict(re.findall(r"--([a-z-]+):\s*(#[0-9a-f]{6})", block))


def luminance(colour: str) -> float:
    """Return the relative luminance of an sRGB colour.

    References
    ----------
    .. [1] Web Content Accessibility Guidelines 2.2, definition of relative luminance.
    """
    parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    red, green, blue = (
        part / 12.92 if part <= 0.04045 else ((part + 0.055) / 1.055) ** 2.4 for part in parts
    )
    return 0.2126 * red + 0.7152 * green + 0.0722 * blue


def contrast(one: str, other: str) -> float:
    """Return the contrast ratio of two colours (same source)."""
    low, high = sorted((luminance(one), luminance(other)))
    return (high + 0.05) / (low + 0.05)


def test_contrast_is_that_of_the_guidelines() -> None:
    assert contrast("#000000", "#ffffff") == pytest.approx(21)
    assert contrast("#777777", "#ffffff") == pytest.approx(4.48, abs=0.005)


@pytest.mark.parametrize("theme", THEMES)
@pytest.mark.parametrize("name", TEXT)
@pytest.mark.parametrize("ground", ["ground", "panel"])
def test_words_can_be_read(theme: str, name: str, ground: str) -> None:
    colours = palette(theme)

    assert contrast(colours[name], colours[ground]) >= 4.5


@pytest.mark.parametrize("theme", THEMES)
@pytest.mark.parametrize("name", MARKS)
def test_marks_and_lines_can_be_seen(theme: str, name: str) -> None:
    colours = palette(theme)

    assert contrast(colours[name], colours["ground"]) >= 3


def test_ink_can_be_read_on_the_highlighter() -> None:
    colours = palette("light")

    assert contrast(colours["look-ink"], colours["look"]) >= 4.5


@pytest.mark.parametrize("theme", THEMES)
def test_the_colours_of_the_two_signs_are_far_apart(theme: str) -> None:
    colours = palette(theme)
    channels = [[int(colours[name][i : i + 2], 16) for i in (1, 3, 5)] for name in ("added", "taken")]

    assert sum(abs(a - b) for a, b in zip(*channels, strict=True)) > 300


def test_the_vendored_script_is_the_version_that_plotly_carries() -> None:
    version = get_plotlyjs_version()
    script = ASSETS / f"00-plotly-basic-{version}.min.js"

    head = script.read_text(encoding="utf-8")[:200]

    assert f"plotly.js (basic - minified) v{version}" in head
    assert "MIT" in (ASSETS / f"00-plotly-basic-{version}.LICENSE.txt").read_text(encoding="utf-8")


@pytest.mark.parametrize("name", ["page.css", "page.js", "mark.svg", "../index.html"])
def test_our_own_files_name_no_other_server(name: str) -> None:
    text = (ASSETS / name).read_text(encoding="utf-8")

    addresses = set(re.findall(r"https?://[^\s\"']+", text))
    assert addresses <= {"http://www.w3.org/2000/svg"}
    assert not re.search(r"(url\(|src=)\s*['\"]?//", text)
