"""The morning report: every number from the record, nothing where that has nothing, blinded as the run is."""

from __future__ import annotations

import copy
import json
import re
import subprocess
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from daq.cli import main
from daq.report.document import document, words
from daq.report.facts import said
from daq.report.html import html_text
from daq.report.methods import methods
from daq.report.proposal import proposal
from daq.service.figures import figures_of
from daq.service.morning import facts_of, write_report
from daq.storage.verify import verify
from tests.examples import CONFIGS

BROKEN = re.compile(r"[{}]|\bnan\b|\bNone\b|\binf\b|\[\s*\]|\(\s*\)|±\s*$|\s{3,}")
NUMBER = re.compile(r"(?<![\w.:/-])[+−-]?\d+\.?\d*(?:e[+-]?\d+)?(?![\w:/-])")
OF_THE_FORM = ("1e-4", "95")  # the unit in which kappa is told, and the confidence of every interval
FORBIDDEN = ("violat", "confirmed", "quantum mechanics is")


def short_night(folder: Path, more: str = "") -> Path:
    """Return a short rehearsal of the Lantern night."""
    text = (CONFIGS / "lantern.toml").read_text() + more
    text = text.replace("number = 41", "number = 5").replace("laps = 38", "laps = 8")
    text = text.replace('"rigs/lantern.toml"', f'"{(CONFIGS / "rigs" / "lantern.toml").as_posix()}"')
    (folder / "night.toml").write_text(text)
    assert (
        main(["rehearse", str(folder / "night.toml"), "--link", "direct", "--into", str(folder / "lab")]) == 0
    )
    (run,) = (folder / "lab" / "runs").iterdir()
    return run


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return short_night(tmp_path_factory.mktemp("night"))


@pytest.fixture(scope="module")
def facts(run: Path) -> dict[str, Any]:
    found = facts_of(run, figures_of(run))
    left_out = {"account": {**found["account"], "left_out": {"fingerprint": 2}}}
    bench = {
        "pilot": {
            "record": "pilot/1",
            "verdict": "pass",
            "at_utc": "2026-12-01T10:00:00Z",
            "sentence": "steady",
        }
    }
    armed = {"by": "night watch", "utc": "2026-12-01T16:00:00Z", "without": {"register": "the chip is new"}}
    more = {"bench": bench, "armed": armed, "laid_in": ["The drift is that of pilot/1."]}
    return {**found, **left_out, **more, "kappa_with_excluded": 1e-4}


def leaves(value: Any, path: tuple[Any, ...] = ()) -> Iterator[tuple[Any, ...]]:
    """Yield the path of every field, tables and lists themselves too."""
    if path:
        yield path
    inner = (
        value.items() if isinstance(value, dict) else enumerate(value[:2]) if isinstance(value, list) else ()
    )
    for key, one in inner:
        yield from leaves(one, (*path, key))


def without(facts: dict[str, Any], path: tuple[Any, ...], value: Any) -> dict[str, Any]:
    """Return facts in which one field is missing (None), or is no number."""
    fresh = copy.deepcopy(facts)
    inner: Any = fresh
    for key in path[:-1]:
        inner = inner[key]
    inner[path[-1]] = value
    return fresh


def test_every_text_is_whole_whatever_one_field_is_missing(facts: dict[str, Any]) -> None:
    whole = list(words(document(facts)))
    told = {path for path in leaves(facts) if path[0] not in ("software", "rates_hz", "rates_se_hz", "terms")}

    for path in told:
        for nothing in (None, float("nan")):
            broken = [text for text in words(document(without(facts, path, nothing))) if BROKEN.search(text)]
            assert not broken, (path, broken)
    assert not [text for text in whole if BROKEN.search(text)]


@pytest.mark.parametrize(
    "path",
    [
        ("settings", "dead_time_s"),
        ("counted", "positions"),
        ("counted", "width_um"),
        ("set_up", "wavelength_m"),
        ("visits_done",),
        ("kappa_counting_se",),
        ("once", "low"),
        ("software", "version"),
        ("level", "range_pc"),
        ("told",),
    ],
)
def test_a_sentence_of_the_methods_paragraph_without_its_number_is_left_out(
    facts: dict[str, Any], path: tuple[str, ...]
) -> None:
    whole, less = methods(facts), methods(without(facts, path, None))

    assert len(less) < len(whole)
    assert not BROKEN.search(less)


def numbers(value: Any) -> Iterator[float]:
    if isinstance(value, dict):
        for inner in value.values():
            yield from numbers(inner)
    elif isinstance(value, list):
        for inner in value:
            yield from numbers(inner)
    elif isinstance(value, (int, float)) and not isinstance(value, bool):
        yield float(value)


def strings(value: Any) -> Iterator[str]:
    if isinstance(value, dict):
        for inner in value.values():
            yield from strings(inner)
    elif isinstance(value, list):
        for inner in value:
            yield from strings(inner)
    elif isinstance(value, str):
        yield value


def untold(texts: str, kept: dict[str, Any]) -> list[str]:
    """Return the numbers of a text that facts hold neither as numbers nor in their own texts."""
    known = list(numbers(kept))
    as_text = {token for text in strings(kept) for token in NUMBER.findall(text)}
    return [
        token
        for token in NUMBER.findall(texts)
        if token not in as_text and token not in OF_THE_FORM and not told(token, known)
    ]


def told(token: str, known: list[float]) -> bool:
    """Return whether a number is one of those that are known, in its own digits and a unit of the report."""
    value = float(token.replace("−", "-"))
    digits = len(re.sub(r"e.*", "", token).partition(".")[2])
    step = 0.51 * 10.0 ** (-digits + (int(token.partition("e")[2]) if "e" in token else 0))
    return any(abs(one * scale - value) <= step for one in known for scale in (1, 1e4, 100, 1 / 3600, 1e9))


def test_every_number_of_the_report_stands_in_its_json(run: Path) -> None:
    write_report(run)
    kept = json.loads((run / "report.json").read_text())

    assert not untold(" ".join(words(document(kept))), kept)


def test_a_number_that_the_json_does_not_hold_is_found(run: Path) -> None:
    write_report(run)
    kept = json.loads((run / "report.json").read_text())
    whole = " ".join(words(document(kept)))

    assert untold(f"{whole} 8.7654321e-3", kept) == ["8.7654321e-3"]


def test_no_law_is_judged_and_no_outside_resource_is_named(run: Path) -> None:
    write_report(run)
    page = (run / "report.html").read_text()

    assert not [word for word in FORBIDDEN if word in page.lower()]
    assert not re.findall(r"""(?:src|href)\s*=\s*["'](?!#)[^"']+|url\((?!["']?#)|@import""", page)
    assert "size: A4" in page


def test_the_report_is_one_page_and_an_appendix_on_paper(run: Path) -> None:
    write_report(run)

    text = subprocess.run(
        ["pdftotext", "-layout", str(run / "report.pdf"), "-"], capture_output=True, text=True, check=True
    )
    first, second, *_ = text.stdout.split("\f")

    assert "Accepted:" in first
    assert "Where the error comes from" in first
    assert "Methods paragraph" in second


def test_a_run_stays_whole_beside_its_report(run: Path) -> None:
    write_report(run)

    assert verify(run).ok


def test_a_blinded_run_stays_blinded(tmp_path: Path) -> None:
    hidden = short_night(tmp_path, '\n[blinding]\nhalfwidth = "0.05"\n')
    figures = figures_of(hidden)
    facts = facts_of(hidden, figures)
    write_report(hidden, figures)
    page, kept = (hidden / "report.html").read_text(), json.loads((hidden / "report.json").read_text())

    assert "kappa + offset" in page
    assert "This run is blinded" in methods(facts)
    assert not [word for word in ("Zero lies", "zero lies", "|kappa|") if word in page]
    assert (kept["truth_kappa"], kept["epsilon"]) == (None, None)
    assert all(row is None or all(one is None for one in [row]) for row in kept["epsilon_hz"])


def test_the_verdict_that_was_signed_stands_on_the_report(run: Path) -> None:
    main(["accept", str(run), "counts", "--by", "morning shift"])

    found = document(facts_of(run, figures_of(run)))

    assert found.signature.startswith("Accepted: counts, by morning shift, ")


@pytest.mark.parametrize(
    ("change", "word", "reason"),
    [
        ({}, "counts", "All"),
        ({"kappa_se": None}, "does not count", "no residual"),
        ({"damaged": ["a chunk is lost"]}, "doubtful", "archive is lost"),
        ({"visits_missing": 3}, "counts in part", "3 of"),
        ({"account": {"doubtful": True, "checks": []}}, "doubtful", "a person has to decide"),
        ({"account": {"checks": [{"name": "odd", "p": 1e-5}]}}, "doubtful", "`odd` is off: p = 1e-05"),
    ],
)
def test_a_verdict_is_proposed_with_its_reason(
    facts: dict[str, Any], change: dict[str, Any], word: str, reason: str
) -> None:
    verdict, reasons = proposal({**facts, **change})

    assert verdict == word
    assert any(reason in one for one in reasons)


def test_a_field_that_is_not_there_takes_its_sentence_with_it() -> None:
    facts = {"a": 1.5, "deep": {"b": -2e-4}, "nothing": float("nan"), "empty": []}

    assert said(facts, "{a:.2f} and {deep.b*1e4:+.1f}") == "1.50 and −2.0"
    assert [said(facts, text) for text in ("{c}", "{deep.c}", "{nothing}", "{empty}", "{deep}")] == [""] * 5


def test_text_from_people_cannot_become_html(facts: dict[str, Any]) -> None:
    page = html_text(document({**facts, "title": "<script>alert(1)</script>"}), "<svg></svg>")

    assert "<script>" not in page


def test_what_a_start_was_armed_without_is_told_with_its_reason(facts: dict[str, Any]) -> None:
    told = list(words(document(facts)))

    assert "Armed by night watch, 2026-12-01T16:00:00Z." in told
    assert "Armed without a valid record of register: the chip is new." in told
    assert "The drift is that of pilot/1." in told


def test_records_that_a_plan_did_not_take_are_told_to_be_unused(facts: dict[str, Any]) -> None:
    assert "Plan and estimate took none of them." in list(words(document(facts | {"laid_in": None})))
