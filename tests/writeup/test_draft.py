"""The methods section in its three forms, and the references in their two: the same words in each."""

from __future__ import annotations

import io
import json
import re
import shutil
import subprocess

import pytest

from clingstone.display import clean, latex
from clingstone.needs import NotSupported
from clingstone.writeup import word
from clingstone.writeup.bibliography import bibtex, csl_json, source, used
from clingstone.writeup.draft import draft, opening, shown, where
from clingstone.writeup.items import GUIDELINES, ITEMS, NUMBERED
from clingstone.writeup.latex import latex_text
from clingstone.writeup.methods import methods_text
from clingstone.writeup.sentences import sections
from tests.writeup import fixture

MAKERS = [fixture.trial, fixture.stream, fixture.wells, fixture.hostile]


def _sentences(results):
    return [s for part in sections(results) for s in part.sentences]


# ---- what answers what -----------------------------------------------------------------------


@pytest.mark.parametrize("make", MAKERS)
def test_each_sentence_stands_in_the_table_with_its_items_and_back(make):
    results = make()
    parts, paper = sections(results), draft(results)
    numbered = [(f"{part.title} {k}", s) for part in parts for k, s in enumerate(part.sentences, 1)]
    assert [row[0].text for row in paper.answers.rows] == [name for name, _ in numbered]
    for row, (_, s) in zip(paper.answers.rows, numbered, strict=True):
        assert row[1].text == opening(s.text)
        assert row[2].text == (", ".join(s.items) or "none; it is a remark")
    for item in ITEMS:
        told = where(parts, item)
        found = [
            (part.title, k) for part in parts for k, s in enumerate(part.sentences, 1) if item in s.items
        ]
        assert len(re.findall(r"\d+", told)) == len(found)
        assert all(re.search(rf"{title} [^;]*\b{k}\b", told) for title, k in found)
        blanks = sum(s.blank for s in _sentences(results) if item in s.items)
        assert told.count("(blank left)") == blanks


def test_guidelines_are_named_by_their_own_numbers_and_cited():
    assert set(NUMBERED) == set(ITEMS)
    for told in filter(None, NUMBERED.values()):
        for part in told.split("; "):
            name = next(g for g in GUIDELINES if part.startswith(g))
            assert re.fullmatch(r"\d+[a-e]?(, \d+[a-e]?)*", part.removeprefix(name).strip())
    assert set(GUIDELINES.values()) <= set(used(fixture.trial()))
    assert "Campbell et al. 2012" in draft(fixture.trial()).items.note


def test_the_opening_of_a_sentence_ends_at_a_word():
    assert opening("Short.") == "Short."
    long = "word " * 30
    assert opening(long) == "word " * 12 + "…"


# ---- LaTeX -----------------------------------------------------------------------------------


@pytest.mark.parametrize("make", MAKERS)
def test_latex_holds_every_sentence_and_table(make):
    results = make()
    text = latex_text(results)
    for s in _sentences(results):
        said = latex(clean(s.text))
        assert (rf"\blank{{{said}}}" if s.blank else said) in text
    for table in shown(results).values():
        assert table.to_latex() in text


@pytest.mark.parametrize("make", MAKERS)
def test_latex_is_balanced_and_nothing_in_it_is_special_by_accident(make):
    """After the commands of ours no bare special character is left, and every environment closes."""
    text = latex_text(make())
    body = text[text.index(r"\begin{document}") :]
    open_ones: list[str] = []
    for kind, name in re.findall(r"\\(begin|end)\{(\w+)\}", body):
        if kind == "begin":
            open_ones.append(name)
        else:
            assert open_ones.pop() == name
    assert not open_ones
    kept = [line for line in body.splitlines() if not line.startswith("% ")]
    bare = re.sub(r"\\[\\&%$#_{}]", "", "\n".join(kept))
    assert bare.count("{") == bare.count("}")
    assert "#" not in bare
    assert "^" not in re.sub(r"\$\^\\circ\$", "", bare)
    assert not re.search(r"(?<!\\)_", bare)
    assert all("%" not in line.removesuffix("%") for line in bare.splitlines())


def test_what_the_fonts_of_pdftex_lack_is_declared():
    text = latex_text(fixture.hostile())
    assert r"\DeclareUnicodeCharacter{05D2}{\fbox{\tiny 05D2}}" in text  # a Hebrew letter of the labels
    assert r"\DeclareUnicodeCharacter{1F411}" in text
    head, _, body = text.partition(r"\begin{document}")
    declared = {int(code, 16) for code in re.findall(r"DeclareUnicodeCharacter\{(\w+)\}", head)}
    from clingstone.writeup.latex import KNOWN

    assert {c for c in body if ord(c) > 126} <= KNOWN | {chr(c) for c in declared}


def _found(name: str) -> bool:
    return subprocess.run(["kpsewhich", name], capture_output=True, check=False).returncode == 0


@pytest.mark.parametrize("engine", ["pdflatex", "lualatex", "xelatex", "tectonic"])
@pytest.mark.parametrize("make", MAKERS)
def test_latex_compiles(make, engine, tmp_path):
    if shutil.which(engine) is None or (engine == "lualatex" and not _found("luaotfload-main.lua")):
        pytest.skip(f"{engine} is not installed, or not whole")
    (tmp_path / "methods.tex").write_text(latex_text(make()), encoding="utf-8")
    flags = [] if engine == "tectonic" else ["-interaction=nonstopmode", "-halt-on-error"]
    done = subprocess.run([engine, *flags, "methods.tex"], cwd=tmp_path, capture_output=True, check=False)
    assert done.returncode == 0, done.stdout[-3000:]
    assert (tmp_path / "methods.pdf").read_bytes()[:5] == b"%PDF-"


# ---- Word ------------------------------------------------------------------------------------


@pytest.mark.parametrize("make", MAKERS)
def test_word_opens_and_holds_every_sentence_table_and_blank(make):
    docx = pytest.importorskip("docx")
    results = make()
    document = docx.Document(io.BytesIO(word.word_bytes(results)))
    text = "\n".join(p.text for p in document.paragraphs)
    runs = {r.text.strip(): r.font.highlight_color for p in document.paragraphs for r in p.runs}
    for s in _sentences(results):
        said = clean(s.text).strip()
        assert said in text
        assert (runs[said] is not None) == s.blank
    paper = draft(results)
    expected = (*paper.tables, paper.items, paper.answers)
    assert len(document.tables) == len(expected)
    for made, table in zip(document.tables, expected, strict=True):
        cells = [[c.text for c in row.cells] for row in made.rows]
        assert cells == [table.heads, *table.shown()]


def test_word_has_the_same_bytes_each_time():
    pytest.importorskip("docx")
    assert word.word_bytes(fixture.trial()) == word.word_bytes(fixture.trial())


def test_without_python_docx_the_refusal_says_what_to_install(monkeypatch):
    monkeypatch.setattr(word, "available", lambda: False)
    with pytest.raises(NotSupported, match="python-docx") as caught:
        word.word_bytes(fixture.trial())
    assert "clingstone[word]" in caught.value.hint


# ---- Markdown and references -----------------------------------------------------------------


def test_markdown_holds_both_tables():
    text = methods_text(fixture.trial())
    paper = draft(fixture.trial())
    for table in (paper.items, paper.answers):
        assert f"## {table.caption}" in text
        assert text.count("\n| ") >= len(table.rows) + 1


# CSL 1.0.2 asks for id and type of every item; the other names are those of its schema.
CSL_TYPES = {"article-journal", "book", "chapter", "software", "document"}
CSL_NAMES = {
    "id", "type", "author", "issued", "title", "container-title", "volume", "issue", "page", "publisher",
    "DOI", "version",
}  # fmt: skip


@pytest.mark.parametrize("make", MAKERS)
def test_csl_json_is_well_formed_and_agrees_with_bibtex(make):
    results = make()
    found = json.loads(csl_json(results))
    assert len({item["id"] for item in found}) == len(found)
    for item in found:
        assert item["type"] in CSL_TYPES
        assert set(item) <= CSL_NAMES
        assert all(isinstance(item[k], str) and item[k] for k in ("id", "title"))
        for person in item.get("author", []):
            assert person.keys() in ({"family", "given"}, {"literal"})
        if "issued" in item:
            ((year,),) = item["issued"]["date-parts"]
            assert str(year) == source(item["id"]).fields["year"]
    keys = set(re.findall(r"@\w+\{([^,]+),", bibtex(results)))
    assert {item["id"] for item in found} == keys


def test_software_is_cited_with_the_versions_that_were_used():
    results = fixture.trial()
    found = {i["id"]: i["version"] for i in json.loads(csl_json(results)) if i["type"] == "software"}
    assert found == {"clingstone": "0.1.0", "python": "3.12.4", "numpy": "2.4.0", "scipy": "1.17.0"}
    for name, version in found.items():
        assert re.search(rf"@software\{{{name},[^@]*version = \{{{version}\}}", bibtex(results))


def test_a_source_reads_as_csl_by_hand():
    (item,) = [i for i in json.loads(csl_json(fixture.trial())) if i["id"] == "campbell-2012"]
    assert item["author"][0] == {"family": "Campbell", "given": "Marion K."}
    assert (item["container-title"], item["volume"], item["page"]) == ("BMJ", "345", "e5661")
