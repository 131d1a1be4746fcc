"""The methods section as a Word document (extra ``word``: python-docx)."""

from __future__ import annotations

import importlib.util
import io
import zipfile
from datetime import datetime
from typing import TYPE_CHECKING, Any

from clingstone.display import Table, clean
from clingstone.needs import NotSupported
from clingstone.results import Results
from clingstone.writeup.draft import draft

if TYPE_CHECKING:
    from docx.document import Document

THEN = datetime(1980, 1, 1)  # the same results give the same bytes, whatever the clock says


def available() -> bool:
    """Whether python-docx is installed."""
    return importlib.util.find_spec("docx") is not None


def word_bytes(results: Results) -> bytes:
    """The whole methods section as the bytes of a .docx file; blanks are highlighted.

    Raises NotSupported when python-docx is not installed.
    """
    if not available():
        raise NotSupported(
            "a Word document needs python-docx, which is not installed",
            'Install it with pip install "clingstone[word]".',
        )
    import docx
    from docx.enum.text import WD_COLOR_INDEX

    paper = draft(results)
    document = docx.Document()
    document.core_properties.created = document.core_properties.modified = THEN
    document.core_properties.title = paper.title[:255]
    document.core_properties.author = ""
    document.add_heading(paper.title, 1)
    document.add_paragraph().add_run(paper.note).italic = True
    for part in paper.parts:
        document.add_heading(part.title, 2)
        paragraph = document.add_paragraph()
        for k, s in enumerate(part.sentences):
            run = paragraph.add_run(f"{' ' if k else ''}{clean(s.text)}")
            if s.blank:
                run.font.highlight_color = WD_COLOR_INDEX.YELLOW
    for table in (*paper.tables, paper.items, paper.answers):
        _table(document, table)
    document.add_heading("References", 2)
    for r in paper.references:
        document.add_paragraph(clean(r.text))
    return _timeless(document)


def _table(document: Document, table: Table) -> None:
    document.add_heading(clean(table.caption), 3)
    rows = table.shown()
    made = document.add_table(rows=1 + len(rows), cols=len(table.columns))
    made.style = "Light List"
    for row, texts in zip(made.rows, [table.heads, *rows], strict=True):
        for cell, text in zip(row.cells, texts, strict=True):
            cell.text = clean(text)
    document.add_paragraph(clean(table.note))


def _timeless(document: Any) -> bytes:
    """The file with the times inside its archive fixed."""
    raw, out = io.BytesIO(), io.BytesIO()
    document.save(raw)
    with zipfile.ZipFile(raw) as old, zipfile.ZipFile(out, "w", zipfile.ZIP_DEFLATED) as new:
        for name in old.namelist():
            new.writestr(zipfile.ZipInfo(name, THEN.timetuple()[:6]), old.read(name), zipfile.ZIP_DEFLATED)
    return out.getvalue()
