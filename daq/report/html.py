"""HTML: the morning report as one file without outside resources, one printed page and its appendix."""

from __future__ import annotations

import io
from collections.abc import Iterator
from html import escape

from daq.report.document import FOOTER, Block, Document

STYLE = """
@page { size: A4; margin: 11mm }
* { box-sizing: border-box }
body { font: 8pt/1.2 'DejaVu Sans', Arial, sans-serif; color: #1b1b1b; background: #fff; margin: 0 auto;
  max-width: 188mm }
h1 { font-size: 13pt; margin: 0 }
h2 { font-size: 8.5pt; margin: 4pt 0 2pt; break-after: avoid; border-bottom: 0.5pt solid #777 }
p { margin: 1.5pt 0 } .head { color: #444 }
.verdict { border: 1.5pt solid #1b1b1b; padding: 3pt 6pt; margin: 4pt 0 } .verdict b { font-size: 12pt }
.residual p:first-child { font-size: 11pt; font-weight: bold }
table { border-collapse: collapse; width: 100%; font-size: 6.4pt; line-height: 1.1 }
th { text-align: left; font-weight: bold }
td, th { padding: 0.6pt 4pt 0.6pt 0; vertical-align: top; border-bottom: 0.3pt solid #ccc;
  overflow-wrap: break-word }
td:not(:first-child):not(:last-child) { white-space: nowrap }
.appendix td, .appendix p { overflow-wrap: anywhere }
.appendix td:not(:first-child):not(:last-child) { white-space: normal }
.two { columns: 2; column-gap: 6mm } .two section:nth-child(-n+2), tr { break-inside: avoid }
svg { width: 100%; height: auto; display: block }
.sign { margin-top: 4pt; border-top: 1pt solid #1b1b1b; padding-top: 3pt }
footer { font-size: 7pt; color: #444; margin-top: 3pt } .appendix { break-before: page }
@media (max-width: 640px) { .two { columns: 1 } body { padding: 0 10px } }
"""


def html_text(found: Document, picture_svg: str) -> str:
    """Return a report as HTML; `picture_svg` is the figure of the night."""
    return "\n".join(_parts(found, picture_svg)) + "\n"


def svg_of(figure: object) -> str:
    """Return a figure as SVG to stand within HTML."""
    buffer = io.StringIO()
    figure.savefig(buffer, format="svg", metadata={"Date": None, "Creator": None})  # type: ignore[attr-defined]
    text = buffer.getvalue()
    return text[text.index("<svg") :]


def _parts(found: Document, picture_svg: str) -> Iterator[str]:
    yield f'<!DOCTYPE html><html lang="en"><head><meta charset="utf-8"><title>{escape(found.title)}</title>'
    yield f'<meta name="viewport" content="width=device-width"><style>{STYLE}</style></head><body><main>'
    yield f"<h1>{escape(found.title)}</h1><p class='head'>{escape('; '.join(found.head))}</p>"
    if found.verdict:
        yield f"<div class='verdict'>Proposed: this night <b>{escape(found.verdict)}</b>"
        yield "".join(f"<p>{escape(reason)}</p>" for reason in found.reasons) + "</div>"
    yield "<div class='residual'>" + "".join(f"<p>{escape(line)}</p>" for line in found.residual) + "</div>"
    yield picture_svg
    yield "<div class='two'>" + "".join(map(_block, found.page)) + "</div>"
    yield f"<p class='sign'>{escape(found.signature)}</p><footer>{escape(FOOTER)}</footer></main>"
    yield "<div class='appendix'>" + "".join(map(_block, found.appendix)) + "</div></body></html>"


def _block(block: Block) -> str:
    lines = "".join(f"<p>{escape(line)}</p>" for line in block.lines)
    return f"<section><h2>{escape(block.title)}</h2>{lines}{_table(block)}</section>"


def _table(block: Block) -> str:
    if len(block.rows) < 2:
        return ""
    head, *rows = block.rows
    named = "".join(f"<th>{escape(cell)}</th>" for cell in head)
    body = "".join("<tr>" + "".join(f"<td>{escape(cell)}</td>" for cell in row) + "</tr>" for row in rows)
    return f"<table><thead><tr>{named}</tr></thead><tbody>{body}</tbody></table>"
