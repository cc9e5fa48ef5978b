"""The part of the page for slits that were cut apart, as Dash components."""

from __future__ import annotations

from dash import html

from dashboard.buttons import Children, Part

_READ = "Power of the leftover by its frequency over position, before and after the slits are accounted for"


def spectrum(part: Part | None) -> Children:
    """Return the section; nothing where there is nothing to say."""
    if part is None:
        return []
    figures = [html.Li([html.Span(one["name"]), html.Span(one["value"])]) for one in part["figures"]]
    return [
        html.H2("Slits cut apart"),
        html.Ul(figures),
        *(html.P(sentence, className="caption") for sentence in part["says"]),
        html.P(f"{_READ}, from the lowest frequency on; counting noise is 1.", className="caption"),
        html.Div([_column(*pair) for pair in part["columns"]], className="columns", role="img", **_named()),
        _table(part),
    ]


def _named() -> dict[str, str]:
    return {"aria-label": f"{_READ}; the table below has the figures."}


def _column(before: float, after: float) -> html.Div:
    return html.Div(
        [
            html.Span(className="before", style={"height": f"{before}%"}),
            html.Span(className="after", style={"height": f"{after}%"}),
        ]
    )


def _table(part: Part) -> html.Table:
    head = html.Tr([html.Th(word, scope="col") for word in ("Slits", "before", "after")])
    rows = [
        html.Tr([html.Th(line["name"], scope="row"), html.Td(line["before"]), html.Td(line["after"])])
        for line in part["lines"]
    ]
    return html.Table([html.Thead(head), html.Tbody(rows)])
