"""Pieces of a self-contained HTML page: no request, all text escaped."""

import base64
import html
from collections.abc import Iterable, Sequence

__all__ = ["bullets", "image", "page", "section", "table"]

_STYLE = """
body { font: 15px/1.5 sans-serif; color: #222; max-width: 62rem; margin: 2rem auto;
  padding: 0 1rem; }
h1 { font-size: 1.6rem; margin-bottom: 0.2rem; }
h2 { font-size: 1.15rem; margin: 2.2rem 0 0.6rem; border-bottom: 1px solid #ccc; }
p.lead { color: #555; margin-top: 0; }
nav a { margin-right: 1em; }
a { color: #0c388a; }
.wide { overflow-x: auto; }
table { border-collapse: collapse; font-size: 0.87rem; }
td:nth-child(2) { white-space: nowrap; }
.text td:nth-child(2) { white-space: normal; }
th, td { padding: 0.2rem 0.7rem 0.2rem 0; text-align: left; vertical-align: top;
  border-bottom: 1px solid #e4e4e4; }
td { overflow-wrap: anywhere; font-variant-numeric: tabular-nums; }
.warnings { background: #fff4dc; border-left: 4px solid #f8a500;
  padding: 0.3rem 1rem; }
.warnings h2 { border: 0; margin-top: 0.4rem; }
figure { margin: 1.6rem 0; }
figure img { max-width: 100%; height: auto; border: 1px solid #e4e4e4; }
details summary { cursor: pointer; }
@media (max-width: 48rem) {
  .wide:not(.text) table { min-width: 46rem; }
  figure { overflow-x: auto; }
  figure img { max-width: none; width: 42rem; }
}
@media print { details > * { display: block; } figure { break-inside: avoid; } }
"""

# The browser itself refuses whatever is not in the page.
_POLICY = "default-src 'none'; img-src data:; style-src 'unsafe-inline'"

_TYPES = {"svg": "image/svg+xml", "png": "image/png"}


def page(title: str, lead: str, sections: Iterable[str], *, script: str = "") -> str:
    """Put sections together to a page, without a script unless given."""
    name = html.escape(title)
    policy = _POLICY + ("; script-src 'unsafe-inline'" if script else "")
    code = f"<script>\n{script}</script>\n" if script else ""
    return (
        '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        f'<meta http-equiv="Content-Security-Policy" content="{policy}">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        f"<title>{name}</title>\n<style>{_STYLE}</style>\n</head>\n<body>\n"
        f'<h1>{name}</h1>\n<p class="lead">{html.escape(lead)}</p>\n'
        + "\n".join(sections)
        + f"\n{code}</body>\n</html>\n"
    )


def section(title: str, body: str, *, kind: str = "", folded: bool = False) -> str:
    """Give a part of the page its heading."""
    if folded:
        body = f"<details><summary>show</summary>\n{body}\n</details>"
    mark = f' class="{kind}"' if kind else ""
    return f"<section{mark}>\n<h2>{html.escape(title)}</h2>\n{body}\n</section>"


def table(rows: Sequence[Sequence[str]], header: Sequence[str] = ()) -> str:
    """Write a table; the first cell of each row names it, numbers come second."""
    lines = []
    if header:
        cells = "".join(f'<th scope="col">{html.escape(cell)}</th>' for cell in header)
        lines.append(f"<thead><tr>{cells}</tr></thead>")
    lines.append("<tbody>")
    for name, *others in rows:
        rest = "".join(f"<td>{html.escape(cell)}</td>" for cell in others)
        lines.append(f'<tr><th scope="row">{html.escape(name)}</th>{rest}</tr>')
    lines.append("</tbody>")
    kind = "" if header else " text"
    return f'<div class="wide{kind}"><table>{"".join(lines)}</table></div>'


def bullets(items: Iterable[str]) -> str:
    """Write a list of sentences."""
    return "<ul>" + "".join(f"<li>{html.escape(item)}</li>" for item in items) + "</ul>"


def image(name: str, form: str, data: bytes, description: str) -> str:
    """Embed a picture."""
    text = base64.b64encode(data).decode()
    return (
        f'<figure id="{html.escape(name)}"><img src="data:{_TYPES[form]};base64,{text}" '
        f'alt="{html.escape(description)}"></figure>'
    )
