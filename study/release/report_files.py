"""The report as one HTML file, as Markdown, and as plain text for the preview."""

from __future__ import annotations

import base64
import textwrap
from collections.abc import Mapping

from study.literal import clean
from study.release.escaping import for_html, for_markdown
from study.release.material import Release, Table
from study.release.report import Block, Heading, Items, Sentences, Shown, report_blocks
from study.release.table_files import html_text, markdown_text, plain_text

# A picture is data inside the file, so that nothing is fetched; the policy forbids everything else.
_HEAD = """<!doctype html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta http-equiv="Content-Security-Policy" content="default-src 'none'; img-src data:; style-src 'unsafe-inline'">
<meta name="viewport" content="width=device-width, initial-scale=1">
<title>{title}</title>
<style>
:root {{ color-scheme: light; }}
body {{ font: 16px/1.55 Georgia, "DejaVu Serif", serif; color: #1c1c1c; background: #fff; margin: 0 auto;
  max-width: 46rem; padding: 2.5rem 1.25rem 4rem; overflow-wrap: anywhere; }}
h1, h2, h3, table, caption, .note {{ font-family: "Helvetica Neue", Arial, "DejaVu Sans", sans-serif; }}
h1 {{ font-size: 1.7rem; line-height: 1.2; margin: 0 0 .4rem; }}
h2 {{ font-size: 1.15rem; margin: 2.4rem 0 .6rem; padding-top: .7rem; border-top: 1px solid #c8c8c8; }}
h3 {{ font-size: 1rem; margin: 1.8rem 0 .4rem; }}
p {{ margin: .5rem 0; }}
p.lead {{ font-size: 1.12rem; border-left: 4px solid #1f4e79; padding-left: .9rem; }}
ul {{ padding-left: 1.2rem; }} li {{ margin: .3rem 0; }}
.wide {{ overflow-x: auto; margin: 1rem 0 .2rem; }}
table {{ border-collapse: collapse; font-size: .8rem; line-height: 1.35; min-width: 100%; overflow-wrap: normal; }}
caption {{ text-align: left; font-weight: 600; padding-bottom: .35rem; }}
th, td {{ text-align: left; vertical-align: top; padding: .3rem .7rem .3rem 0; border-bottom: 1px solid #e2e2e2; }}
th {{ font-weight: 600; border-bottom: 1px solid #767676; }}
.n {{ text-align: right; font-variant-numeric: tabular-nums; white-space: nowrap; }}
th.n {{ white-space: normal; }}
.note {{ font-size: .78rem; color: #555; margin-top: 0; }}
figure {{ margin: 1.2rem 0; }} img {{ width: 100%; max-width: 44rem; height: auto; }}
@media print {{ body {{ max-width: none; padding: 0; font-size: 11pt; }} h2, h3, caption {{ break-after: avoid; }}
  figure, tr {{ break-inside: avoid; }} .wide {{ overflow: visible; }} table {{ font-size: 8pt; }}
  th, td {{ padding-right: .45rem; }} @page {{ margin: 18mm 16mm; }} }}
</style>
</head>
<body>
"""


def html_report(release: Release, figures: Mapping[str, bytes]) -> str:
    """One file that opens without a network: `figures` are the pictures' SVG files by name."""
    parts = [_HEAD.format(title=for_html(release.title))]
    parts += [_as_html(block, figures) for block in report_blocks(release)]
    return "".join(parts) + "</body>\n</html>\n"


def _as_html(block: Block, figures: Mapping[str, bytes]) -> str:
    match block:
        case Heading(text, level):
            return f"<h{level}>{for_html(text)}</h{level}>\n"
        case Sentences(text, lead):
            opening = '<p class="lead">' if lead else "<p>"
            return f"{opening}{for_html(text)}</p>\n"
        case Items(texts):
            return (
                "<ul>\n" + "".join(f"<li>{for_html(text)}</li>\n" for text in texts) + "</ul>\n"
                if texts
                else ""
            )
        case Shown(name, title):
            data = base64.b64encode(figures[name]).decode("ascii")
            return f'<figure><img alt="{for_html(title)}" src="data:image/svg+xml;base64,{data}"></figure>\n'
        case Table():
            return html_text(block)


def markdown_report(release: Release, files: Mapping[str, str]) -> str:
    """The same report; `files` are the pictures' places beside it by name."""
    parts = []
    for block in report_blocks(release):
        match block:
            case Heading(text, level):
                parts.append(f"{'#' * level} {for_markdown(text)}\n")
            case Sentences(text, lead):
                parts.append(f"**{for_markdown(text)}**\n" if lead else for_markdown(text) + "\n")
            case Items(texts):
                if texts:
                    parts.append("\n".join(f"- {for_markdown(text)}" for text in texts) + "\n")
            case Shown(name, title):
                parts.append(f"![{for_markdown(title)}]({files[name]})\n")
            case Table():
                note = f"\n{for_markdown(block.note)}\n" if block.note else ""
                parts.append(f"{for_markdown(block.title)}\n\n{markdown_text(block)}{note}")
    return "\n".join(parts)


def preview_lines(release: Release, width: int = 80) -> list[str]:
    """The same report as lines of text, for a screen."""
    lines: list[str] = []
    for block in report_blocks(release):
        match block:
            case Heading(text, level):
                lines += ["", clean(text).upper() if level < 3 else clean(text), ""]
            case Sentences(text):
                lines += [*textwrap.wrap(clean(text), width), ""]
            case Items(texts):
                for text in texts:
                    wrapped = textwrap.wrap(clean(text), width - 2)
                    lines += [f"{'·' if i == 0 else ' '} {line}" for i, line in enumerate(wrapped)]
                lines.append("")
            case Shown(_, title):
                lines += [f"[figure: {clean(title)}]", ""]
            case Table():
                lines += [clean(block.title), "", *plain_text(block), ""]
    return lines
