"""References: from the keys that findings, refits and rules carry to BibTeX and plain text.

The entries stand in ``sources.bib`` beside this file. A DOI is given there only where it was
confirmed in an outside text.
"""

from __future__ import annotations

import json
import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import cache
from importlib.resources import files

from clingstone.display import listed
from clingstone.results import Reference, Results
from clingstone.writeup.items import GUIDELINES

OWN = "own"  # the source of a rule that rests on this package's own reasoning; no reference

_ENTRY = re.compile(r"@(\w+)\{([^,\s]+),\n(.*?)\n\}", re.S)
_FIELD = re.compile(r"^\s*(\w+) = \{(.*)\},$", re.M)


@dataclass(frozen=True)
class Source:
    """One entry of sources.bib."""

    key: str
    kind: str
    fields: Mapping[str, str]
    bibtex: str

    @property
    def text(self) -> str:
        """The entry as one line of a reference list."""
        get = {k: v.replace(r"\&", "&") for k, v in self.fields.items()}
        venue = get.get("journal") or get.get("booktitle") or get.get("publisher", "")
        volume = get.get("volume", "") + (f"({get['number']})" if "number" in get else "")
        pages = get.get("pages", "").replace("--", "–")
        where = ", ".join(part for part in (f"{venue} {volume}".strip(), pages) if part)
        title = get["title"] + ("" if get["title"][-1] in "?!." else ".")
        line = f"{authors(get['author'])} ({get['year']}). {title} {where}."
        return f"{line} doi:{get['doi']}" if "doi" in get else line

    @property
    def cited(self) -> str:
        """As a sentence cites it: "Kenward & Roger 1997"."""
        names = [_family(n) for n in self.fields["author"].split(" and ")]
        many = len(names) > 2 or "others" in names
        return f"{f'{names[0]} et al.' if many else ' & '.join(names)} {self.fields['year']}"


@cache
def sources() -> Mapping[str, Source]:
    """Every known source by its key."""
    text = files("clingstone.writeup").joinpath("sources.bib").read_text(encoding="utf-8")
    found = {}
    for match in _ENTRY.finditer(text):
        kind, key, body = match.groups()
        found[key] = Source(key, kind, dict(_FIELD.findall(body)), match.group(0))
    return found


def source(key: str) -> Source:
    """One source. Raises KeyError for a key that sources.bib does not hold."""
    return sources()[key]


def keys_in(text: str) -> tuple[str, ...]:
    """Keys in a source field, in order: "bell-mccaffrey-2002, satterthwaite-1946"."""
    return tuple(part.strip() for part in re.split(r"[,;]", text) if part.strip() and part.strip() != OWN)


def used(results: Results) -> tuple[str, ...]:
    """Keys of every finding with numbers, refit, reason and reporting guideline, each once, by first use."""
    fields: Iterable[str] = (
        *(f.source for f in results.evidence if f.verdict != "not applicable"),
        *(fit.account.source for fit in results.refits),
        *(reason.source for reason in (*results.advice.because, *results.advice.cautions)),
        *GUIDELINES.values(),
    )
    return tuple(dict.fromkeys(key for text in fields for key in keys_in(text)))


def references_of(results: Results) -> tuple[Reference, ...]:
    """The references of an examination, sorted by key.

    A source that is not in sources.bib is kept as the words in which it was given, so that a reader
    still sees what a rule rests on.
    """
    out = []
    for key in sorted(used(results)):
        known = sources().get(key)
        out.append(Reference(key, known.bibtex, known.text) if known else _as_given(key))
    return tuple(out)


def _as_given(words: str) -> Reference:
    key = re.sub(r"[^a-z0-9]+", "-", words.lower()).strip("-")
    return Reference(key, f"@misc{{{key},\n  note = {{{words}}},\n}}", words)


def bibtex(results: Results) -> str:
    """references.bib: the sources of an examination, and the software with versions."""
    return "\n\n".join([*(r.bibtex for r in references_of(results)), *software(results)]) + "\n"


TITLE = "clingstone: which rows of a regression hang together, and what to report"


def versions(results: Results) -> dict[str, str]:
    """Title → version of this software and of those that its numbers rest on."""
    others = {name: v for name, v in results.versions.items() if name != "clingstone"}
    return {TITLE: results.clingstone, **others}


def software(results: Results) -> tuple[str, ...]:
    """The entries that cite this software and the libraries below it, each at its version."""
    return tuple(
        f"@software{{{_software_key(title)},\n  title = {{{title}}},\n  version = {{{v}}},\n}}"
        for title, v in versions(results).items()
    )


def _software_key(title: str) -> str:
    return title.partition(":")[0].lower()


CSL_KIND = {"article": "article-journal", "book": "book", "incollection": "chapter"}
CSL_FIELD = {
    "title": "title", "journal": "container-title", "booktitle": "container-title", "volume": "volume",
    "number": "issue", "pages": "page", "publisher": "publisher", "doi": "DOI",
}  # fmt: skip


def csl_json(results: Results) -> str:
    """references.json: the same entries as CSL-JSON, which reference managers and pandoc read."""
    items = [_csl(source(key)) if key in sources() else {"id": key, "type": "document", "title": key}
             for key in sorted(used(results))]  # fmt: skip
    items += [
        {"id": _software_key(title), "type": "software", "title": title, "version": v}
        for title, v in versions(results).items()
    ]
    return json.dumps(items, ensure_ascii=False, indent=1) + "\n"


def _csl(entry: Source) -> dict[str, object]:
    get = {k: v.replace(r"\&", "&").replace("--", "–") for k, v in entry.fields.items()}
    names = get["author"].split(" and ")
    people = [n.partition(", ") for n in names if n != "others"]
    out: dict[str, object] = {"id": entry.key, "type": CSL_KIND[entry.kind]}
    out["author"] = [{"family": f, "given": g} if g else {"literal": f} for f, _, g in people]
    if "others" in names:
        out["author"] = [*out["author"], {"literal": "others"}]  # type: ignore[misc]
    out["issued"] = {"date-parts": [[int(get["year"])]]}
    return out | {CSL_FIELD[k]: v for k, v in get.items() if k in CSL_FIELD}


def cite(text: str) -> str:
    """A source field as words in brackets: "(Bell & McCaffrey 2002; Satterthwaite 1946)"; "" for none."""
    known = sources()
    words = [known[k].cited if k in known else k for k in keys_in(text)]
    return f"({'; '.join(words)})" if words else ""


def with_source(sentence: str, source: str) -> str:
    """A sentence with its source in brackets before the full stop."""
    return f"{sentence.rstrip(' .')} {cite(source)}".rstrip() + "."


def authors(field: str) -> str:
    """ "Bell, Robert M. and McCaffrey, Daniel F." → "Bell, R. M. & McCaffrey, D. F."."""
    names = [_initials(n) for n in field.split(" and ")]
    if names[-1] == "others":
        return f"{', '.join(names[:-1])} et al."
    return listed(names, "&")


def _initials(name: str) -> str:
    family, comma, given = name.partition(", ")
    if not comma:
        return name
    short = " ".join(
        p if p == "Jr." else "-".join(h[0] + "." for h in p.split("-") if h) for p in given.split()
    )
    return f"{family}, {short}"


def _family(name: str) -> str:
    return name.partition(", ")[0]
