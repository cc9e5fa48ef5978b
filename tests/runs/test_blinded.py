"""A blinded night from end to end: every outlet scanned, states with no way back, and what is refused."""

from __future__ import annotations

import json
import os
import re
import shutil
from collections.abc import Callable, Iterator, Mapping
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from daq.cli import main
from daq.cli.toml import toml_text
from daq.cli.words import parser
from daq.estimate import Blinding, estimate_run
from daq.estimate.dataset import HIDDEN, readings_of_dataset
from daq.service.daily import evening_word, summary_of
from daq.service.metrics import Tally, metrics_text
from daq.service.settings import Messages
from daq.storage.blinding import read_events, state_of
from daq.storage.feed import read_feed
from daq.storage.lock import lock_run
from daq.storage.log import read_log
from daq.storage.reader import open_visits, read_meta
from dashboard.news import news
from tests.examples import CONFIGS, changed, measurement_table

HALFWIDTH = "2.0"  # so wide that an offset too small to be seen is drawn once in thousands of times
WORDS = {
    "positions__number": 5,
    "itinerary__laps": 16,
    "itinerary__dwell_s": 0.5,
    "estimate__goal_se": 1e-3,
    "quality": {"fingerprint_p": 1e-12},
}


def description(folder: Path, **more: Any) -> Path:
    """Write a small Lantern measurement that asks for blinding."""
    table = changed(measurement_table(), rig=str(CONFIGS / "rigs" / "lantern.toml"), **(WORDS | more))
    path = folder / "small.toml"
    path.write_text(toml_text(table))
    return path


def rehearsed(folder: Path, *words: str, **more: Any) -> Path:
    lab = folder / "lab"
    file = description(folder, **more)
    assert main(["rehearse", str(file), "--link", "direct", "--into", str(lab), *words]) == 0
    return sorted((lab / "runs").iterdir())[-1]


BLINDED = {"blinding": {"scope": "spring", "halfwidth": HALFWIDTH}}


@pytest.fixture(scope="module")
def original(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return rehearsed(tmp_path_factory.mktemp("blinded"), **BLINDED)


@pytest.fixture
def run(original: Path, tmp_path: Path) -> Path:
    lab = Path(shutil.copytree(original.parents[1], tmp_path / "lab"))
    return lab / "runs" / original.name


def answer(capsys: pytest.CaptureFixture[str], *words: str) -> tuple[int, dict[str, Any]]:
    capsys.readouterr()
    status = main([*words, "--json"])
    return status, json.loads(capsys.readouterr().out)


def said(capsys: pytest.CaptureFixture[str], *words: str) -> str:
    capsys.readouterr()
    main(list(words))
    told = capsys.readouterr()
    return told.out + told.err


def both(capsys: pytest.CaptureFixture[str], *words: str) -> list[Any]:
    return [said(capsys, *words), answer(capsys, *words)[1]]


# Every command of the program: what gives something out of a run, and why the others do not.
GIVES_OUT: Mapping[str, Callable[[Any, Path], list[Any]]] = {
    "report": lambda capsys, run: both(capsys, "report", str(run)),
    "status": lambda capsys, run: both(capsys, "status", str(run.parents[1])),
    "log": lambda capsys, run: both(capsys, "log", str(run)),
    "verify": lambda capsys, run: both(capsys, "verify", str(run)),
    "note": lambda capsys, run: both(capsys, "note", str(run), "a note"),
    "accept": lambda capsys, run: both(capsys, "accept", str(run), "counts"),
    "pack": lambda capsys, run: both(capsys, "pack", str(run)),
    "export": lambda capsys, run: both(capsys, "export", str(run), str(run.parent / "visits.csv")),
    "blind": lambda capsys, run: both(capsys, "blind", str(run), "--freeze"),
    "bookings": lambda capsys, run: both(capsys, "bookings", str(run.parents[1])),
}
NOTHING_OF_A_RUN = {
    **dict.fromkeys(("check", "compose", "book", "arm", "people", "import"), "it reads no run"),
    **dict.fromkeys(("hold", "resume", "end", "acknowledge", "mute"), "it leaves a request"),
    **dict.fromkeys(("rehearse", "run", "replay"), "it prints what report prints; scanned as the rehearsal"),
    "serve": "what it shows is the page, what it tells is the log and live.json",
    "listen": "it hears heartbeats, which say nothing",
    "task": "it measures the bench, not a run",
    "pool": "scanned in its own test",
    "study": "its nights are made up",
}


DIGESTS = re.compile(r"\b[0-9a-f]{12,}\b")  # of a secret that is new every time: no number
NUMBER = re.compile(r"[-+]?\d+\.?\d*(?:[eE][-+]?\d+)?")


def numbers(of: Any) -> Iterator[float]:
    """Yield every number in nested JSON and in text."""
    if isinstance(of, Mapping):
        for inner in of.values():
            yield from numbers(inner)
    elif isinstance(of, (list, tuple)):
        for inner in of:
            yield from numbers(inner)
    elif isinstance(of, str):
        plain = DIGESTS.sub("", of).replace("\u2212", "-")
        yield from (float(word) for word in NUMBER.findall(plain))
    elif isinstance(of, (int, float)) and not isinstance(of, bool):
        yield float(of)


class Secrets:
    """What must not be found: true rates and counts of ABC, kappa, epsilon, counting bar, offset, truth."""

    def __init__(self, run: Path) -> None:
        visits = open_visits(run)
        hidden = visits.attrs[HIDDEN]
        true = estimate_run(visits.assign_attrs({HIDDEN: Blinding()}))
        assert true.kappa is not None and true.kappa_se is not None
        high = visits["opening"].values == 7
        rates = true.rates_hz[:, 7]
        self.se, self.kappa, self.offset = true.kappa_se, true.kappa, hidden.offsets["ABC"]
        exact = [*rates, *true.rates_se_hz[:, 7], *true.epsilon_hz, *true.epsilon_se_hz]
        exact += [true.kappa, true.kappa_counting_se, true.epsilon, true.epsilon_se, self.offset]
        exact += [*visits["values"].values[high, 0].tolist()]
        assert true.terms is not None
        exact += [term.kappa for term in true.terms.terms if term.kappa is not None]
        self.exact = np.unique(np.abs([float(number) for number in exact if number]))

    def found_in(self, outlet: Any) -> list[float]:
        """Return the numbers of an outlet that are one of the secrets to six digits."""
        seen = np.abs(np.fromiter(numbers(outlet), float))
        seen = seen[np.isfinite(seen) & (seen > 0)]
        place = np.clip(np.searchsorted(self.exact, seen), 1, len(self.exact) - 1)
        near = np.minimum(np.abs(seen - self.exact[place - 1]), np.abs(seen - self.exact[place]))
        return [float(number) for number in seen[near < 1e-6 * seen]]


def test_every_command_is_known_to_this_test() -> None:
    """A new command belongs to GIVES_OUT, where it is scanned, or to NOTHING_OF_A_RUN with its reason."""
    (commands,) = (one for one in parser()._actions if one.dest == "command" or one.choices)
    assert commands.choices is not None

    assert set(commands.choices) <= set(GIVES_OUT) | set(NOTHING_OF_A_RUN)


def test_the_scan_finds_what_an_open_run_gives_out(original: Path) -> None:
    secrets = Secrets(original)
    open_estimate = estimate_run(open_visits(original).assign_attrs({HIDDEN: Blinding()}))

    assert len(secrets.found_in(open_estimate.to_json())) >= 15


@pytest.mark.parametrize("command", GIVES_OUT)
def test_no_command_gives_away_what_is_hidden(
    command: str, run: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    outlet = GIVES_OUT[command](capsys, run)

    assert any(outlet)
    assert Secrets(run).found_in(outlet) == []


def test_live_json_log_page_and_results_give_nothing_away(run: Path) -> None:
    page = news(run.parents[1], run.name, 7, {}, datetime.now(UTC))
    meta = read_meta(run)
    outlets = {
        "live.json": read_feed(run),
        "log.jsonl": (run / "log.jsonl").read_text(),
        "page": json.loads(json.dumps(page, default=lambda part: part.to_plotly_json())),
        "results": [meta["results"], meta["stop"]],
        "blinding record": (run / "blinding.jsonl").read_text(),
    }

    secrets = Secrets(run)
    assert {name: found for name, outlet in outlets.items() if (found := secrets.found_in(outlet))} == {}
    feed = outlets["live.json"]
    assert feed is not None
    assert feed["rates_hz"][7] == [None] * 5
    assert feed["truth_kappa"] is None
    assert feed["blinding"] == "blinded"


def test_the_feed_gives_nothing_away_at_any_time_of_the_night(tmp_path: Path) -> None:
    """The feed is caught every time it is replaced; what it holds at the end is the secret of all pairs."""
    seen: list[Any] = []
    from daq.service import start
    from daq.service.equip import Wanted

    lab, file = tmp_path / "lab", description(tmp_path, **BLINDED)
    folders: list[Path] = []

    def look(_: object) -> None:
        seen.append(read_feed(folders[0]))

    from daq.service.load import load

    wanted = Wanted(
        "direct",
        on_start=lambda folder, _: folders.append(folder),
        on_visit=look,
        on_feed=lambda feed: seen.append(json.loads(json.dumps(feed))),  # however rarely it is written
    )
    folder, _ = start.begin(load(file), lab, wanted)

    secrets = Secrets(folder)
    assert len({json.dumps(feed) for feed in seen}) >= 2
    assert [secrets.found_in(feed) for feed in seen] == [[]] * len(seen)
    assert all(feed is None or feed["rates_hz"][7] == [None] * 5 for feed in seen)


def test_metrics_and_digest_give_nothing_away(run: Path) -> None:
    """Detections by opening, of all positions together, would be a residual of their own."""
    feed, visits = read_feed(run), open_visits(run)
    assert feed is not None
    tally = Tally(hides=Blinding(feed["blinding"]).hides)
    for reading in readings_of_dataset(visits):
        tally.add(reading)

    text = metrics_text(feed, tally, 10**9)
    digest = summary_of(run.parents[1], "UTC", datetime.now(UTC))
    handle = lock_run(run)  # as if it were going on
    evening = evening_word(run.parents[1], Messages(urgent=("mailto://lab.example",)), datetime.now(UTC))
    os.close(handle)

    high = visits["opening"].values == 7
    detections = float(visits["values"].values[high, 0].sum())
    secrets = Secrets(run)
    assert secrets.found_in([text, digest, *(evening or ())]) == []
    assert detections not in set(numbers(text))
    assert float(visits["values"].values[visits["opening"].values == 3, 0].sum()) in set(numbers(text))
    assert "kappa + offset" in digest
    assert evening is not None and "kappa + offset" in evening[1]
    assert "tercet_kappa_ratio" not in text


def test_the_truth_of_a_simulated_bench_is_hidden_with_kappa(run, capsys):
    status, figures = answer(capsys, "report", str(run))

    assert status == 0
    assert (figures["truth_kappa"], figures["statement"], figures["blinding"]) == (None, None, "blinded")
    text = said(capsys, "report", str(run))
    assert "kappa + offset" in text
    assert not any(word in text for word in ("zero lies", "|kappa| <", "simulated truth", "gives a limit"))


def test_kappa_as_it_is_shown_is_moved_by_the_offset_and_rounded(run, capsys):
    secrets = Secrets(run)

    _, figures = answer(capsys, "report", str(run))

    assert figures["kappa"] - secrets.kappa == pytest.approx(secrets.offset, abs=0.06 * secrets.se)
    assert abs(secrets.offset) > 0.5 * secrets.se  # else this test would show nothing


def test_commitments_stand_in_the_attributes_before_the_first_count(run):
    meta, events = read_meta(run), read_events(run)

    assert meta["blinding_commitments"] == events[0]["commitments"]
    assert [event["event"] for event in events] == ["blind.open", "blind.run"]
    assert meta["stop"]["kappa_visible"] is False


def test_the_secret_is_readable_by_its_owner_alone_and_in_no_run_folder(run):
    secret = run.parents[1] / "blinding" / "secret"

    assert secret.stat().st_mode & 0o777 == 0o600
    data = secret.read_bytes()
    assert len(data) == 32
    files = [path for path in run.rglob("*") if path.is_file()]
    assert not any(data in path.read_bytes() or data.hex().encode() in path.read_bytes() for path in files)


def test_frozen_then_revealed_and_no_way_back(run, capsys, monkeypatch):
    secrets = Secrets(run)
    typed = iter(["spring\n"])
    monkeypatch.setattr("sys.stdin", type("Typed", (), {"readline": lambda self: next(typed)})())

    assert answer(capsys, "blind", str(run), "--reveal")[0] == 2  # not frozen yet
    assert answer(capsys, "blind", str(run), "--freeze")[1]["state"] == "frozen"
    assert answer(capsys, "blind", str(run))[0] == 2
    status, figures = answer(capsys, "blind", str(run), "--reveal")
    again = answer(capsys, "blind", str(run), "--reveal")

    assert (status, figures["state"]) == (0, "revealed")
    assert figures["offsets"]["ABC"] == secrets.offset
    assert again[1] == figures  # nothing was typed: the first answer is given again
    assert answer(capsys, "blind", str(run), "--freeze")[1]["state"] == "revealed"
    assert answer(capsys, "blind", str(run))[0] == 2
    assert answer(capsys, "accept", str(run), "counts")[1]["after_unblinding"] is True
    report = answer(capsys, "report", str(run))[1]
    assert report["kappa"] == pytest.approx(secrets.kappa, abs=1e-15)
    assert report["statement"]["limit"] > 0
    feed = read_feed(run)
    assert feed is not None
    assert feed["kappa"]["value"] == pytest.approx(secrets.kappa, abs=1e-15)
    assert answer(capsys, "verify", str(run))[0] == 0


def test_a_scope_that_was_not_typed_reveals_nothing(run, capsys, monkeypatch):
    monkeypatch.setattr("sys.stdin", type("Typed", (), {"readline": lambda self: "yes\n"})())
    answer(capsys, "blind", str(run), "--freeze")

    status, figures = answer(capsys, "blind", str(run), "--reveal")

    assert status == 2
    assert "was not typed" in figures["problems"][0]
    assert state_of(read_events(run)) == "frozen"


@pytest.mark.parametrize("command", [["pack"], ["pack", "--zip"], ["export"]])
def test_raw_counts_are_given_out_on_demand_only_and_that_is_logged(run, capsys, command):
    words = [command[0], str(run), *(["visits.csv"] if command == ["export"] else command[1:])]
    words = [str(run.parent / word) if word.endswith(".csv") else word for word in words]

    status, figures = answer(capsys, *words)
    refused = [path.name for path in run.parent.iterdir()]
    raw, _ = answer(capsys, *words, "--raw")

    assert status == 4
    assert "is blinded" in figures["problems"][0]
    assert refused == [run.name]
    assert raw == 0
    assert "raw" in read_log(run)[-1]["event"]


def test_without_its_secret_nothing_is_shown(run, capsys):
    (run.parents[1] / "blinding" / "secret").unlink()

    status, figures = answer(capsys, "report", str(run))

    assert status == 4
    assert "the secret that hides its kappa is not in its lab" in figures["problems"][0]
    assert answer(capsys, "verify", str(run))[0] == 0


def test_another_secret_is_refused(run, capsys):
    secret = run.parents[1] / "blinding" / "secret"
    secret.write_bytes(bytes(32))

    status, figures = answer(capsys, "report", str(run))

    assert status == 4
    assert "is not the one that hides this run" in figures["problems"][0]


def test_a_secret_that_others_may_read_is_refused(run, capsys):
    (run.parents[1] / "blinding" / "secret").chmod(0o644)

    status, figures = answer(capsys, "report", str(run))

    assert status == 4
    assert "chmod 600" in figures["problems"][0]


@pytest.mark.parametrize("where", ["run", "lab"])
def test_a_record_that_was_edited_is_refused(run, capsys, where):
    path = run / "blinding.jsonl" if where == "run" else run.parents[1] / "blinding" / "spring.jsonl"
    path.write_text(path.read_text().replace(f'"halfwidth": "{HALFWIDTH}"', '"halfwidth": "0.2"'))

    status, figures = answer(capsys, "report", str(run))

    assert status == 4
    assert "blinding record was changed" in figures["problems"][0]


def test_a_night_of_the_same_campaign_shares_the_offset_until_it_is_frozen(run, tmp_path, capsys):
    first = Secrets(run)
    other = rehearsed(tmp_path, "--seed", "5", **BLINDED)

    assert Secrets(other).offset == first.offset
    answer(capsys, "blind", str(other), "--freeze")
    assert state_of(read_events(run)) == "frozen"
    status = main(["rehearse", str(description(tmp_path, **BLINDED)), "--into", str(tmp_path / "lab")])
    assert status == 2
    assert "is frozen already" in capsys.readouterr().err


def test_a_half_width_that_is_no_number_above_zero_is_refused_in_a_sentence(tmp_path, capsys):
    run = rehearsed(tmp_path)
    for halfwidth in ("abc", "0", "nan", ""):
        assert main(["blind", str(run), f"--halfwidth={halfwidth}"]) == 2

        assert f"--halfwidth: a number above zero like 0.001, not {halfwidth!r}." in capsys.readouterr().err


def test_an_analysis_that_changed_after_it_was_frozen_is_not_revealed(run, capsys):
    answer(capsys, "blind", str(run), "--freeze")
    root = run / "run.zarr" / "zarr.json"
    meta = json.loads(root.read_text())
    meta["attributes"]["dead_time_s"] *= 2
    root.write_text(json.dumps(meta))

    status, figures = answer(capsys, "blind", str(run), "--reveal")

    assert status == 2
    assert "not those that were frozen" in figures["problems"][0]


def test_an_open_run_can_be_blinded_later_and_its_last_feed_is_taken_back(tmp_path, capsys):
    run = rehearsed(tmp_path)
    before = read_feed(run)
    kappa = answer(capsys, "report", str(run))[1]["kappa"]

    status, figures = answer(capsys, "blind", str(run), "--halfwidth", HALFWIDTH, "--by", "Kim")

    assert (status, figures["state"], figures["scope"]) == (0, "blinded", run.name)
    assert figures["events"][-1]["after_counts"] is True
    assert before is not None and before["kappa"]["value"] == pytest.approx(kappa, rel=1e-12)
    assert Secrets(run).found_in(read_feed(run)) == []
    assert Secrets(run).found_in(said(capsys, "report", str(run))) == []
    assert answer(capsys, "verify", str(run))[0] == 0


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"blinding": {"halfwidth": "0.001"}}, "hides little beside a goal of 0.001"),
        ({"blinding": {"halfwidth": "wide"}}, "halfwidth"),
        ({"blinding": {"halfwidth": "0"}}, "must be above zero"),
        ({"blinding": {"halfwidth": "0.1", "scope": "a b"}}, "scope"),
        ({**BLINDED, "stop": {"futility": True}}, "would tell how small"),
        ({**BLINDED, "estimate__normalisation": "central"}, "only the pairwise normalisation"),
        ({"stop": {"significant": True}}, "covers 77 to 84 %"),
        ({"stop": {"goal": True}, "estimate__goal_se": None}, "it needs estimate.goal_se"),
    ],
)
def test_a_description_that_would_hide_nothing_is_refused(tmp_path, capsys, changes, words):
    file = description(tmp_path, **changes)

    status, figures = answer(capsys, "check", str(file))

    assert status == 2
    assert any(words in problem for problem in figures["problems"])
