"""A table as CSV, Markdown, LaTeX and HTML."""

from __future__ import annotations

from study.literal import clean
from study.release.escaping import for_csv, for_html, for_latex, for_markdown
from study.release.material import Table

MINUS = "\N{MINUS SIGN}"


def csv_text(table: Table) -> str:
    """Heading and rows; lines end as RFC 4180 has it."""
    lines = [",".join(for_csv(text) for text in row) for row in (table.head, *table.rows)]
    return "\r\n".join(lines) + "\r\n"


def markdown_text(table: Table) -> str:
    """A pipe table."""
    rule = ["---:" if j in table.numeric else "---" for j in range(len(table.head))]
    rows = [[for_markdown(text) or " " for text in row] for row in (table.head, *table.rows)]
    lines = [rows[0], rule, *rows[1:]]
    return "\n".join("| " + " | ".join(row) + " |" for row in lines) + "\n"


def html_text(table: Table) -> str:
    """A table element with its caption."""

    def cells(row: tuple[str, ...], tag: str) -> str:
        opening = [f'<{tag} class="n">' if j in table.numeric else f"<{tag}>" for j in range(len(row))]
        return "".join(
            f"{opening[j]}{for_html(_typeset(text, j, table))}</{tag}>" for j, text in enumerate(row)
        )

    body = "\n".join(f"<tr>{cells(row, 'td')}</tr>" for row in table.rows)
    note = f'<p class="note">{for_html(table.note)}</p>' if table.note else ""
    return (
        f'<div class="wide"><table>\n<caption>{for_html(table.title)}</caption>\n'
        f"<thead><tr>{cells(table.head, 'th')}</tr></thead>\n<tbody>\n{body}\n</tbody>\n</table></div>\n{note}\n"
    )


def latex_text(table: Table) -> str:
    """A tabular with rules of its own, to be put into any document."""
    columns = "".join("r" if j in table.numeric else "l" for j in range(len(table.head)))
    rows = [
        " & ".join(for_latex(_typeset(text, j, table)) for j, text in enumerate(row)) + r" \\"
        for row in table.rows
    ]
    head = " & ".join(for_latex(text) for text in table.head) + r" \\"
    return "\n".join(
        [
            f"% {clean(table.title)}".replace("\\", "/"),
            rf"\begin{{tabular}}{{{columns}}}",
            r"\hline",
            head,
            r"\hline",
            *rows,
            r"\hline",
            r"\end{tabular}",
            "",
        ]
    )


def plain_text(table: Table) -> list[str]:
    """Aligned columns, for the preview."""
    from study.figures import table_lines  # shares the page's own columns

    return table_lines([table.head, *table.rows], right=table.numeric, indent=0, gap=2)


def _typeset(text: str, column: int, table: Table) -> str:
    """A minus sign where a number is negative."""
    return MINUS + text[1:] if column in table.numeric and text.startswith("-") else text
