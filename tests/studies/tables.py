"""Tables: results of the studies as Markdown, written between the markers of DEVELOPERS.md."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

DEVELOPERS = Path(__file__).resolve().parents[2] / "DEVELOPERS.md"
BEGIN, END = "<!-- studies: begin -->", "<!-- studies: end -->"


def write(results: Path, page: Path = DEVELOPERS) -> None:
    """Write the tables of every result between the markers of a page; the rest of it stays as it is."""
    page.write_text(between(page.read_text(), text(results)))


def between(page: str, tables: str) -> str:
    """Return a page with tables between its markers, which are put at its end where they are missing."""
    if BEGIN not in page:
        page = f"{page.rstrip()}\n\n{BEGIN}\n{END}\n"
    head, rest = page.split(BEGIN, 1)
    return f"{head}{BEGIN}\n{tables}{END}{rest.split(END, 1)[1]}"


def text(results: Path) -> str:
    """Return every result that there is, as Markdown."""
    parts = [line for name in _FORMS for line in _study(results / f"{name}.json", name)]
    return "\n".join(
        [
            "## What the estimates do: studies",
            "",
            "Made by `python -m tests.studies tables` from `tests/studies/results`; a study is run by",
            "`python -m tests.studies NAME [--nights N] [--workers N] [--json PATH]`, one of plans by",
            "`python -m tests.studies.plans NAME`; seeds are fixed, and every row has a generator of its own",
            "name, so that workers change no figure. An exclamation mark says that a target is missed.",
            "",
            *parts,
        ]
    )


def _study(path: Path, name: str) -> Iterator[str]:
    if not path.exists():
        return
    result = json.loads(path.read_text())
    title, columns = _FORMS[name]
    yield f"### {title}"
    yield ""
    yield f"{result['about']}. {result['cpu_s']:.0f} s of one core."
    yield ""
    yield f"| | {' | '.join(columns)} |"
    yield f"|---|{'---|' * len(columns)}"
    for row, found in result["rows"].items():
        missed = "" if all(found.get("meets", {}).values()) else " !"
        yield f"| {row}{missed} | {' | '.join(form(found) for form in columns.values())} |"
    yield ""


def _pm(value: str, error: str, sign: str = "") -> Any:
    return lambda found: f"{found[value]:{sign}.3f} ± {found[error]:.3f}".replace("-", "−")


def _plain(key: str, form: str = ".3f") -> Any:
    return lambda found: format(found[key], form) if key in found else ""


def _scaled(key: str, factor: float) -> Any:
    return lambda found: format(found[key] * factor, ".2f") if key in found else ""


def _percent(key: str) -> Any:
    return lambda found: f"{100 * found[key]:.1f} %" if key in found else ""


def _monitored(found: Mapping[str, Any]) -> str:
    return (
        f"sd {found['monitored']['sd']:.3f}, {100 * found['monitored']['coverage_95']:.1f} %"
        if "monitored" in found
        else ""
    )


def _inside(table: str, key: str) -> Any:
    return lambda found: f"{found[table][key]:.4g}" if key in found.get(table, {}) else ""


_NIGHTS = {"nights": _plain("nights", "d"), "bias": _pm("bias", "bias_se", "+"), "sd": _pm("sd", "sd_se")}
_COVERED = {"covers 68 %": _percent("coverage_68"), "covers 95 %": _percent("coverage_95")}


def _alarms(found: Mapping[str, Any]) -> str:
    return f"{100 * found['alarms']:.2f} %" if "alarms" in found else ""


def _known(value: str, error: str, sign: str = "") -> Any:
    form = _pm(value, error, sign)
    return lambda found: form(found) if value in found else ""


_DRAWN = {
    "draws": _plain("draws", "d"),
    "bias [errors]": _known("bias", "bias_se", "+"),
    "scatter over what is said": _known("over_said", "over_said_se"),
    "over the formula": _known("over_formula", "over_formula_se"),
}


def _lost(found: Mapping[str, Any]) -> str:
    if "why" in found:
        return str(found["why"])
    return f"{found['lost_s']:.1f}" if found["ended"] == "complete" else "parks and can be resumed"


_FORMS: dict[str, tuple[str, dict[str, Any]]] = {
    "matrix": (
        "Faults: what is done, what it costs, which test says so",
        {
            "reaction": lambda found: str(found["reaction"]),
            "time lost [s]": _lost,
            "visits repeated": _plain("repeated", "d"),
            "test": lambda found: f"`{found['test'].removeprefix('tests/')}`",
        },
    ),
    "charts": (
        "Charts: false alarms, delays, and what wakes in quiet weeks",
        {
            "changes, alarms or weeks": _plain("alarms", "d"),
            "weeks from alarm to alarm": lambda found: (
                _pm("weeks", "weeks_se")(found) if "weeks" in found else ""
            ),
            "in theory": _plain("theory"),
            "delay of the chart [s]": lambda found: (
                _pm("delay_s", "delay_se_s")(found) if "delay_s" in found else ""
            ),
            "as it runs [s]": lambda found: (
                _pm("running_s", "running_se_s")(found) if "running_s" in found else ""
            ),
            "told after [s]": _plain("told_s", ".0f"),
            "step or slope told rightly": _percent("right"),
            "wakes": _plain("wakes", "d"),
            "notes": _plain("notes", "d"),
        },
    ),
    "chaos": (
        "Chaos: nights with faults of every kind, killed in a third",
        {
            **{
                key.replace("_", " "): _plain(key, "d")
                for key in ("nights", "killed", "faults", "acknowledged", "lost", "misfiled")
            },
            "unseen by encoders": _plain("unseen", "d"),
            "of these left out": _percent("detection"),
            "complete": _plain("complete", "d"),
            "parked": _plain("parked", "d"),
            "no reason": _plain("without_reason", "d"),
            "kappa inside 95 %": lambda found: f"{found['inside']} of {found['with_kappa']}",
        },
    ),
    "tasks": (
        "Bench tasks: their own errors against many draws and against formulas",
        {
            **_DRAWN,
            "middle, over its formula": _plain("middle_over_formula"),
            "scatter over the truth": _percent("share"),
            "false alarms": _alarms,
        },
    ),
    "masks": (
        "Bench tasks of the mask: their errors against many draws, and chips that are refused",
        {
            **_DRAWN,
            "right": _percent("right"),
            "false alarms": _alarms,
        },
    ),
    "zigzag": (
        "Complete zig-zag nights (bias and sd in counting bars)",
        {
            **_NIGHTS,
            "sd over bound": _pm("sd_over_bound", "sd_over_bound_se"),
            **_COVERED,
            "with the monitor": _monitored,
        },
    ),
    "irregular": (
        "Random order, a tenth of the visits lost: the joint fit",
        {**_NIGHTS, **_COVERED, "model bar covers": _percent("model_coverage_95")},
    ),
    "benches": ("Few counts, power readings, bunched counts", {**_NIGHTS, **_COVERED}),
    "exclusions": (
        "Lost visits (error of kappa in counting bars)",
        {"nights": _plain("nights", "d"), "rms": _plain("rms", ".4f"), "largest": _plain("largest", ".4f")},
    ),
    "quality": (
        "Quality rules",
        {
            "nights": _plain("nights", "d"),
            "flags a night": _plain("flags", ".2f"),
            "faults": _plain("faults", "d"),
            "found": _percent("found"),
            "wrongly named": _percent("wrongly_named"),
        },
    ),
    "cuts": (
        "Slits cut apart (kappa in 1e-4, the truth is zero)",
        {
            "draws": _plain("nights", "d"),
            "before, rms": _scaled("before_rms", 1e4),
            "after, rms": _scaled("rms", 1e4),
            "covers 95 %": _percent("coverage_95"),
            "all patterns, rms": _scaled("joint_rms", 1e4),
            "chi-squared over freedom": _plain("chi2_over_dof"),
            "flagged": _percent("flagged"),
        },
    ),
    "watched": (
        "Nights that are watched: how often a band leaves a kappa of zero",
        {
            "nights": _plain("nights", "d"),
            **{
                name: _percent(name)
                for name in ("whole night", "hard end", "t at the end", "t from 2", "t from 8")
            },
        },
    ),
    "stopped": (
        "Nights that a rule ends: how often the t bar covers there",
        {
            "nights": _plain("nights", "d"),
            "goal": _percent("goal"),
            "its pairs": _plain("goal, pairs", ".1f"),
            **{name: _percent(name) for name in ("excess of pair 8", "own scatter from 8")},
            **{name: _percent(name) for name in ("significance from 3", "futility")},
        },
    ),
    "places": (
        "Tests of every position by turning pairs over",
        {
            "nights": _plain("nights", "d"),
            **{name: _percent(name) for name in ("chi-squared", "largest", "Fourier", "combined")},
        },
    ),
    "pooled": (
        "Several nights pooled: coverage, and alarms where nights are equal",
        {
            "sets": _plain("nights", "d"),
            **{
                name: _percent(name)
                for name in (
                    *("count weights", "Paule-Mandel"),
                    *("chi-squared alarms", "Welch alarms", "one night alarms"),
                )
            },
        },
    ),
    "plan_orders": (
        "Orders (Table 1: figures beside the known ones)",
        {
            "laps": _plain("laps", "d"),
            "Q": _inside("figures", "Q"),
            "Q over known": _plain("Q over known"),
            "known off by (its errors)": _plain("known off", "+.1f"),
            "simulated over ours": _pm("simulated", "simulated_se"),
            "farthest column": lambda found: str(found.get("farthest column", "")),
            "its ratio": _plain("farthest ratio"),
        },
    ),
    "plan_search": (
        "Searched orders (Q at the best dwell of each)",
        {
            name: _inside("points", name)
            for name in ("random", "cyclic", "natural", "searched", "laid out", "words")
        },
    ),
    "plan_drift": (
        "Drift variance, simulated over planned",
        {"paths": _plain("nights", "d"), "ratio": _pm("ratio", "ratio_se")},
    ),
    "plan_dwell": (
        "Dwell chosen from a pilot: what it loses in Q",
        {
            "pilots": _plain("nights", "d"),
            "median": _percent("median"),
            "90th percentile": _percent("ninety"),
            "worst": _percent("worst"),
        },
    ),
    "plan_ripple": (
        "Ripples: null nights rejected at 5 %",
        {
            "nights": _plain("nights", "d"),
            "without the measures": _percent("without"),
            "with them": _percent("with"),
        },
    ),
    "plan_nights": (
        "Nights against their forecast",
        {"nights": _plain("nights", "d"), "ratio": _pm("ratio", "ratio_se")},
    ),
    "plan_rehearsals": (
        "Rehearsals against their forecast",
        {"nights": _plain("nights", "d"), "ratio": _pm("ratio", "ratio_se")},
    ),
}
