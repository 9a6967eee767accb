"""Reports as text: Markdown, and HTML pages that need nothing else to be shown."""

import base64
import html
from collections.abc import Sequence
from typing import Any

_STYLE = """
:root { color-scheme: light; }
body { font: 16px/1.5 system-ui, sans-serif; color: #1c1c1c; background: #fcfcfa; margin: 0; }
main { max-width: 62rem; margin: 0 auto; padding: 1rem; }
h1 { font-size: 1.6rem; margin: .8rem 0 .4rem; }
h2 { font-size: 1.2rem; margin: 2rem 0 .4rem; padding-top: .6rem; border-top: 3px solid #0b3d91; }
.caution { border: 2px solid #d55e00; padding: .6rem .9rem; background: #fff6ef; }
.wide { overflow-x: auto; margin: .8rem 0; }
table { border-collapse: collapse; font-variant-numeric: tabular-nums; font-size: .9rem; }
th, td { padding: .2rem .6rem; text-align: right; white-space: nowrap; }
th, td { border-bottom: 1px solid #ddd; }
th:first-child, td:first-child, th.text, td.text { text-align: left; }
td.text { overflow-wrap: anywhere; min-width: 12rem; white-space: normal; }
thead th { border-bottom: 2px solid #444; vertical-align: bottom; }
tr.own { background: #e8eef9; font-weight: 600; }
figure { margin: .8rem 0; }
img { max-width: 100%; height: auto; }
nav a { margin-right: .9rem; white-space: nowrap; }
a:focus { outline: 3px solid #d55e00; }
"""


def markdown(title: str, caution: str, sections: Sequence[Any]) -> str:
    """Return sections of a report (see `mfeat.report.Section`) as Markdown."""
    lines = [f"# {title}", "", f"> **Caution.** {caution}"]
    for section in sections:
        lines += ["", f"## {section.title}"]
        for text in section.text:
            lines += ["", _escaped(text)]
        if section.chart is not None:
            name, about, _ = section.chart
            lines += ["", f"![{about}](charts/{name}.png)"]
        for table in section.tables:
            lines += ["", _row(table.head), "|" + "---|" * len(table.head)]
            for row in table.rows:
                own = row[0] == table.own
                lines.append(_row([f"**{cell}**" if own and cell else cell for cell in row]))
    return "\n".join(lines) + "\n"


def _row(cells: Sequence[str]) -> str:
    shown = [_escaped(cell).replace("|", "\\|").replace("\n", " ") for cell in cells]
    return f"| {' | '.join(shown)} |"


def _escaped(text: str) -> str:
    """Return text that Markdown does not take for HTML."""
    return html.escape(text, quote=False)


def html_page(title: str, caution: str, sections: Sequence[Any], files: dict[str, bytes]) -> str:
    """Return sections of a report as one HTML page; charts are taken from `files`, as SVG."""
    parts = []
    for k, section in enumerate(sections):
        parts.append(f'<section id="s{k}"><h2>{html.escape(section.title)}</h2>')
        parts += [f"<p>{html.escape(text)}</p>" for text in section.text]
        if section.chart is not None:
            name, about, _ = section.chart
            data = base64.b64encode(files[f"charts/{name}.svg"]).decode()
            parts.append(
                f'<figure><img src="data:image/svg+xml;base64,{data}" alt="{html.escape(about)}">'
                "</figure>"
            )
        parts += [_table(table) for table in section.tables]
        parts.append("</section>")
    links = "".join(
        f'<a href="#s{k}">{html.escape(section.title)}</a> ' for k, section in enumerate(sections)
    )
    return (
        '<!DOCTYPE html>\n<html lang="en"><head><meta charset="utf-8">'
        '<meta name="viewport" content="width=device-width, initial-scale=1">'
        f"<title>{html.escape(title)}</title><style>{_STYLE}</style></head>\n<body><main>"
        f"<h1>{html.escape(title)}</h1>"
        f'<p class="caution"><strong>Caution.</strong> {html.escape(caution)}</p>'
        f'<nav aria-label="Sections">{links}</nav>\n' + "\n".join(parts) + "</main></body></html>\n"
    )


def _table(table: Any) -> str:
    # columns of words are set flush left and may be broken
    wordy = [max((len(row[k]) for row in table.rows), default=0) > 30
             for k in range(len(table.head))]  # fmt: skip
    head = "".join(
        f'<th scope="col"{" class=text" if wordy[k] else ""}>{html.escape(cell)}</th>'
        for k, cell in enumerate(table.head)
    )
    rows = []
    for row in table.rows:
        cells = "".join(
            f"<td{' class=text' if wordy[k] else ''}>{html.escape(cell)}</td>"
            for k, cell in enumerate(row)
        )
        rows.append(f"<tr{' class=own' if row[0] == table.own else ''}>{cells}</tr>")
    return (
        f'<div class="wide" tabindex="0"><table><thead><tr>{head}</tr></thead>'
        f"<tbody>{''.join(rows)}</tbody></table></div>"
    )
