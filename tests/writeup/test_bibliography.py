"""Every source key that any room uses is in the bibliography."""

from __future__ import annotations

import re
from dataclasses import replace

import pytest

from clingstone.advice.rules import RULES
from clingstone.evidence import TESTS
from clingstone.remedies import REMEDIES
from clingstone.writeup.bibliography import (
    bibtex,
    cite,
    keys_in,
    references_of,
    source,
    sources,
    used,
    with_source,
)
from tests.writeup import fixture


@pytest.mark.parametrize("item", [*TESTS, *REMEDIES, *RULES], ids=lambda i: i.id)
def test_sources_of_tests_remedies_and_rules_are_known(item):
    for key in keys_in(item.source):
        assert source(key).fields["title"]


def test_an_unknown_key_is_an_error():
    with pytest.raises(KeyError):
        source("nobody-1900")


def test_a_source_given_in_words_is_shown_as_given():
    results = fixture.trial()
    fit = replace(
        results.refits[0], account=replace(results.refits[0].account, source="a note on {the} bench")
    )
    texts = [r.text for r in references_of(replace(results, refits=(fit,)))]
    assert "a note on {the} bench" in texts


def test_entries_are_well_formed():
    assert len(sources()) > 100
    for key, entry in sources().items():
        assert re.fullmatch(r"[a-z0-9-]+", key)
        assert {"author", "year", "title"} <= set(entry.fields)
        assert key.endswith(entry.fields["year"]), key
        assert entry.bibtex.count("{") == entry.bibtex.count("}")
        assert entry.kind in ("article", "book", "incollection")
        if "doi" in entry.fields:
            assert entry.fields["doi"].startswith("10.")


def test_plain_text_and_citation():
    assert source("bell-mccaffrey-2002").text == (
        "Bell, R. M. & McCaffrey, D. F. (2002). Bias reduction in standard errors for linear regression with "
        "multi-stage samples. Survey Methodology 28(2), 169–181."
    )
    assert cite("bell-mccaffrey-2002, barr-2013") == "(Bell & McCaffrey 2002; Barr et al. 2013)"
    assert cite("own") == ""
    assert with_source("So it is.", "own") == "So it is."
    assert with_source("So it is.", "moran-1950") == "So it is (Moran 1950)."


def test_each_reference_once_and_the_software_last():
    results = fixture.trial()
    text = bibtex(results)
    for key in used(results):
        assert text.count(f"{{{key},") == 1
    assert "@software{clingstone," in text
    assert "version = {0.1.0}" in text
