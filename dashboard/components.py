"""Parts of the page as Dash components; every word comes from the view."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from dash import dcc, html

from dashboard.buttons import Children, Part, act_button, desk, operate, question, who
from dashboard.spectrum import spectrum
from dashboard.view import CAUTION

_NEWEST = 4  # lines of the log that stand open beside the verdict
STORES = (
    *("night-data", "pattern-data", "plates-data", "strip-data", "seen", "chosen", "look", "marked"),
    "asked",
)


def page() -> html.Div:
    """Return the page before the first news: every part in reading order, still empty."""
    return html.Div(
        [
            html.A("Skip to the verdict", href="#verdict", className="skip"),
            dcc.Location(id="address"),
            dcc.Interval(id="tick", interval=1000),
            *(dcc.Store(id=name) for name in STORES),
            html.Header([html.Div(id="header"), _buttons()], className="top"),
            html.Main(_sections()),
            html.Footer(
                [
                    html.P(CAUTION, className="caution"),
                    html.P(id="footer", className="soft"),
                    html.Div(id="who", className="soft"),
                ]
            ),
            question(),
        ],
        id="page",
        className="bare",
    )


def render(name: str, part: Any) -> Any:
    """Return the children of one part of the page; data of the figures pass as they are."""
    build = _RENDERERS.get(name)
    return build(part) if build else part


def _buttons() -> html.Div:
    return html.Div(
        [
            html.Button("Room view", id="room", type="button", **{"aria-pressed": "false"}),
            html.Button("Light or dark", id="theme", type="button"),
        ],
        className="buttons",
    )


def _sections() -> Children:
    return [
        html.Div(id="verdict", role="status", tabIndex="-1"),
        html.Div(id="line"),
        html.Section(id="warnings", className="full", **{"aria-live": "polite"}),
        html.Section(id="kappa", className="full"),
        html.Section(
            [html.Div(id="operate"), html.P(id="asked-says", role="status")], className="full", id="operating"
        ),
        html.Section(
            [html.H2("At this moment"), html.Div(id="now"), html.Div(id="sensors")],
            className="full",
            id="present",
        ),
        html.Section(id="log", className="full"),
        html.Section(id="rail", className="full"),
        _figure("night", "κ over the night"),
        _figure("pattern", "Pattern and leftover", _numbers()),
        _figure("strip", "Count rate"),
        html.Section(id="budget", className="full"),
        html.Section(id="cuts", className="full"),
        html.Section(id="desk"),
        html.Nav(id="runs", **{"aria-label": "Runs of this lab"}),
    ]


def _figure(name: str, title: str, *more: Any) -> html.Section:
    graph = dcc.Graph(
        id=name, config={"staticPlot": True, "displayModeBar": False}, responsive=True, className="graph"
    )
    return html.Section(
        [
            html.H2(title, id=f"{name}-title"),
            html.Div(
                graph, id=f"{name}-image", role="img", className=f"image {name}", **{"aria-label": title}
            ),
            html.P(id=f"{name}-caption", className="caption"),
            *more,
        ],
        className="full",
        id=f"{name}-section",
    )


def _numbers() -> html.Details:
    return html.Details([html.Summary("The same as numbers"), html.Div(id="numbers")], id="numbers-shown")


def _header(part: Part) -> Children:
    kind = part["kind"]
    badge = (
        [html.Span(kind["word"], className=f"badge {kind['kind']}"), html.Span(kind["says"])] if kind else []
    )
    return [
        html.H1(part["title"]),
        html.P([*badge, html.Span(part["run"], className="run-name")], className="soft"),
    ]


def _verdict(part: Part) -> Children:
    second = [" ", html.Strong(part["second"])] if part["second"] else []
    return [
        html.Span(className=f"mark {part['tone']}", **{"aria-hidden": "true"}),
        html.P([html.Span(part["first"]), *second], className=f"verdict {part['tone']}"),
    ]


def _line(part: Part) -> Children:
    bar = part["progress"]
    drawn = [] if bar is None else [html.Progress(value=str(bar), max="1", **{"aria-label": "Visits done"})]
    return [html.P([part["line"].removesuffix("."), *_here(part["ends_utc"]), "."], className="line"), *drawn]


def _here(utc: str | None) -> Children:
    return [html.Time(dateTime=utc, className="here")] if utc else []


def _warnings(part: Part) -> Children:
    none = [html.P(part["none"])] if part["none"] else []
    return [html.H2(part["heading"]), *none, *(_warning(item) for item in part["items"])]


def _warning(item: Part) -> html.Article:
    seen = [html.P(item["seen"], className="soft")] if item["seen"] else []
    button = [html.Div(act_button(item["button"]), className="buttons")] if item["button"] else []
    return html.Article(
        [
            html.P(item["what"], className="what"),
            html.P([f"{item['did']} {item['do']} ".lstrip(), html.Strong(item["good"])]),
            *([html.P(item["cost"])] if item["cost"] else []),
            html.P([item["since"].removesuffix("."), *_here(item["since_utc"]), "."], className="soft"),
            *seen,
            *button,
        ],
        className="warning",
    )


def _budget(part: Part | None) -> Children:
    if part is None:
        return []
    lines = html.Ul([_budget_line(line) for line in part["lines"]])
    says = [html.P(sentence, className="caption") for sentence in part["says"]]
    return [html.H2("Where the error comes from"), lines, *says]


def _budget_line(line: Part) -> html.Li:
    drawn = html.Span(style={"width": f"{line['percent']}%"})
    share = html.Span(drawn, className="share", **{"aria-hidden": "true"})
    return html.Li([html.Span(line["name"]), html.Span(line["value"]), share])


def _kappa(part: Part) -> Children:
    error = [html.Span(" ± ", className="plusminus"), part["se"]] if part["se"] else []
    return [
        html.H2(part["heading"]),
        html.P(
            [part["figure"] or part["short"], *error],
            className="figure" if part["figure"] else "figure short",
        ),
        html.P(part["unit"], className="unit"),
        *(_band(band) for band in part["bands"]),
        *(html.P(sentence, className="says") for sentence in part["says"]),
    ]


def _band(band: Part) -> html.Div:
    low, high = band["from_percent"], band["to_percent"]
    drawn = html.Span(style={"left": f"{low}%", "width": f"{round(high - low, 1)}%"}, className="bar")
    ruler = html.Span([html.Span(className="zero"), drawn], className="ruler", **{"aria-hidden": "true"})
    words = [html.Strong(band["ends"]), html.Span(band["label"])]
    return html.Div([ruler, html.P(words)], className=f"band {band['kind']}{' read' if band['read'] else ''}")


def _rail(part: Part) -> Children:
    many = " many" if part["slits"] > 3 else ""
    groups = html.Div([_group(group, part["slits"]) for group in part["groups"]], className=f"groups{many}")
    return [html.H2("Openings"), groups, html.P(part["says"], className="caption")]


def _group(group: Part, slits: int) -> html.Div:
    word, sign, kind = ("added", "+", "added") if group["added"] else ("taken away", "−", "taken")
    plates = [_plate(opening, slits, kind, word) for opening in group["openings"]]
    label = [
        html.Span(sign, className="sign"),
        f" {group['label']}",
        html.Span(f", {word}", className="word"),
    ]
    return html.Div(
        [html.P(label, className="group-label"), html.Div(plates, className="plates")],
        className=f"group {kind}",
        style={"--plates": len(plates)},
    )


def _plate(opening: Part, slits: int, kind: str, word: str) -> html.Button:
    mask = opening["mask"]
    cuts = [html.Span(className="slit open" if mask >> bit & 1 else "slit") for bit in range(slits)]
    return html.Button(
        [
            html.Span(cuts, className="mask", **{"aria-hidden": "true"}),
            html.Span(className="silhouette", **{"aria-hidden": "true"}),
            html.Span(opening["name"], className="name"),
        ],
        type="button",
        className=f"plate {kind}",
        **{"data-opening": str(mask), "aria-pressed": "false", "aria-label": f"{opening['name']}, {word}"},
    )


def _now(part: Part) -> html.P:
    return html.P(
        part["says"], className="now", **{"data-mask": "" if part["mask"] is None else str(part["mask"])}
    )


def _sensors(part: list[str]) -> Children:
    return [html.Ul([html.Li(text) for text in part])] if part else []


def _log(part: list[Part]) -> Children:
    lines = [html.Li([html.Span(f"{entry['utc']} ", className="soft"), entry["text"]]) for entry in part]
    newest, earlier = lines[:_NEWEST], lines[_NEWEST:]
    more = [html.Details([html.Summary(f"Earlier, {len(earlier)}"), html.Ol(earlier)])] if earlier else []
    return [html.H2("What happened"), html.Ol(newest), *more] if lines else []


def _runs(part: list[Part]) -> Children:
    if len(part) < 2:
        return []
    links = [html.Li(html.A(run["name"], href=f"/runs/{run['name']}", **_current(run))) for run in part]
    newest = html.Li(html.A("always the newest", href="/"))
    return [html.Details([html.Summary("Other runs of this lab"), html.Ul([newest, *links])])]


def _current(run: Part) -> dict[str, str]:
    return {"aria-current": "page"} if run["shown"] else {}


_RENDERERS: dict[str, Callable[[Any], Any]] = {
    "header": _header,
    "verdict": _verdict,
    "line": _line,
    "warnings": _warnings,
    "kappa": _kappa,
    "rail": _rail,
    "now": _now,
    "sensors": _sensors,
    "log": _log,
    "runs": _runs,
    "operate": operate,
    "who": who,
    "budget": _budget,
    "cuts": spectrum,
    "desk": desk,
}
