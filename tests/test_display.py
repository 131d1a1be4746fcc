"""Numbers and tables as people read them. Expected texts are worked out by hand."""

from __future__ import annotations

import csv
import io
import math
import re

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from clingstone.display import (
    Cell,
    Column,
    Table,
    align_decimals,
    amount,
    bounds,
    clean,
    columns_of,
    count,
    decimals_for,
    degrees,
    freedom,
    instead,
    latex,
    listed,
    near,
    number,
    p_figure,
    p_value,
    percent,
    percent_bounds,
    percent_span,
    quoted,
    rows,
    sentence,
    significant,
    span,
    times,
)


@pytest.mark.parametrize(
    ("se", "decimals"),
    [(1.49, 1), (0.71, 2), (0.0032, 4), (12.3, 0), (1234.0, -2), (0.0996, 2), (0.9951, 1), (10.0, 0)],
)
def test_two_digits_of_the_standard_error_decide_the_decimals(se, decimals):
    assert decimals_for(se) == decimals


@pytest.mark.parametrize("se", [0.0, -1.0, math.nan, math.inf])
def test_an_error_that_decides_nothing_gives_two_decimals(se):
    assert decimals_for(se) == 2


@given(st.floats(1e-6, 1e6))
def test_the_decimals_show_exactly_two_digits(se):
    places = decimals_for(se)
    shown = round(se, places) * 10.0**places
    assert 9.5 <= shown <= 100.5


@pytest.mark.parametrize(
    ("value", "decimals", "text"),
    [
        (-3.14159, 1, "−3.1"),
        (-0.004, 2, "0.00"),  # no minus before a zero
        (12345.6, 0, "12,346"),
        (1234.5, 1, "1,234.5"),
        (1250.0, -2, "1,200"),
        (math.nan, 2, "—"),
        (-math.inf, 1, "−∞"),
        (3.2e-9, 10, "3.2\u00a0×\u00a010⁻⁹"),
    ],
)
def test_numbers_are_written_with_a_true_minus_and_grouped_thousands(value, decimals, text):
    assert number(value, decimals) == text


@pytest.mark.parametrize(
    ("p", "text"),
    [
        (0.25, "p = 0.25"),
        (0.0995, "p = 0.10"),
        (0.063, "p = 0.063"),
        (0.0031, "p = 0.003"),
        (0.0004, "p = 4 × 10⁻⁴"),
        (1.6e-5, "p = 2 × 10⁻⁵"),
        (1e-30, "p < 10⁻⁶"),
        (0.0, "p < 10⁻⁶"),
        (1.0, "p > 0.99"),
        (math.nan, "p not available"),
    ],
)
def test_p_values(p, text):
    assert p_value(p).replace("\u00a0", " ") == text


@given(st.floats(1e-6, 0.9), st.floats(1e-6, 0.9))
def test_a_smaller_p_never_reads_larger(a, b):
    def read(p: float) -> float:
        text = p_figure(p).replace("\u00a0", "").replace("×10⁻", "e-").translate(SUPER)
        return float(text)

    low, high = sorted((a, b))
    assert read(low) <= read(high) * (1 + 1e-12)


SUPER = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹", "0123456789")


@pytest.mark.parametrize(
    ("share", "text"),
    [(0.18, "18 %"), (0.004, "0.4 %"), (0.0, "0 %"), (0.996, "99.6 %"), (1.0, "100 %"), (0.00001, "0 %")],
)
def test_shares(share, text):
    assert percent(share).replace("\u00a0", " ") == text


def test_ranges_and_ratios():
    assert percent_span(0.06, 0.41).replace("\u00a0", " ") == "6 to 41 %"
    assert span(-6.42, 0.18, 1) == "−6.4 to 0.2"
    assert times(2.3449) == "2.3 times as wide"
    assert times(1.01) == "about as wide"
    assert times(0.851) == "0.85 times as wide"
    assert significant(0.0312) == "0.031"
    assert significant(12_300_000.0).replace("\u00a0", " ") == "1.2 × 10⁷"
    assert [degrees(v) for v in (10.43, 409.0, 388.96, math.inf)] == ["10.4", "409", "389", "∞"]


def test_words():
    assert count(1, "clinic") == "1 clinic"
    assert count(12, "clinic") == "12 clinics"
    assert count(2, "county") == "2 counties"
    assert count(2, "batch") == "2 batches"
    assert count(85, "series") == "85 series"
    assert count(6, "g") == "6 groups of g"
    assert count(1, "se") == "1 group of se"
    assert count(3, "school_id") == "3 groups of school_id"
    assert count(18, "Variety within Block") == "18 units of Variety within Block"
    assert count(1204, "pair") == "1,204 pairs"
    assert listed(["a", "b", "c"]) == "a, b and c"
    assert listed("abcdefgh", most=4) == "a, b, c and 5 more"
    assert quoted([1, "x"]) == "‘1’ and ‘x’"
    assert rows([2]) == "row 3"
    assert rows(np.arange(50), 3) == "rows 1, 2 and 48 more"
    assert rows(np.int64(0)) == "row 1"
    assert near("Wieght", ["weight", "height", "day"])[0] == "weight"
    assert instead("Wieght", ["weight", "day"]) == "Did you mean ‘weight’?"
    assert sentence("  only 4 groups ") == "Only 4 groups."
    assert sentence("") == ""


@pytest.mark.parametrize(
    ("said", "expected"),
    [
        (significant(-3.14159), "−3.1"),
        (significant(412.4, 3), "412"),
        (significant(72_800.0, 3), "72,800"),
        (number(-0.001, 2), "0.00"),
        (number(1936.0, 0, grouped=False), "1936"),
        (number(19360.0, 0, grouped=False), "19,360"),
        (bounds(-6.42, 0.18, 1), " (−6.4 to 0.2)"),
        (bounds(math.nan, 1.0), ""),
        (percent_bounds(0.06, 0.41), " (6 to 41 %)"),
        (percent_bounds(0.06, math.nan), ""),
        (amount(14.0), "14"),
        (amount(7.19214), "7.192"),
        (amount(0.25), "0.25"),
        (amount(12_345.6), "12,346"),
        (amount(1e12), "1.000 × 10¹²"),
        (amount(2.5e-7), "2.500 × 10⁻⁷"),
        (freedom(1.0), "1 degree of freedom"),
        (freedom(10.43), "10.4 degrees of freedom"),
        (freedom(11.0, 396.0), "11 and 396 degrees of freedom"),
    ],
)
def test_numbers_in_sentences(said, expected):
    assert said.replace("\u00a0", " ") == expected


def test_labels_cannot_send_control_characters():
    assert "\x1b" not in clean("ward\x1b[31m\nred\u202e")
    assert clean("a\nb\tc") == "a b c"


def test_decimals_stand_under_each_other():
    texts = align_decimals(["1.25", "10", "0.5", "—"])
    assert texts[0] == "1.25"
    assert texts[2] == "0.5\u2007"
    assert texts[1] == "10\u2008\u2007\u2007"  # a point and two digits are padded
    assert texts[3] == "—"


def _table() -> Table:
    columns = (Column("name", "name"), Column("est", "estimate", "decimal"), Column("p", "p", "right"))
    rows = [
        [Cell("a & <b>", "a & <b>"), Cell("−3.1", -3.14159), Cell("0.063", 0.0634)],
        [Cell("long " * 12, "long"), Cell("10.25", 10.251), Cell("—", math.nan)],
    ]
    return Table.of("Estimates", columns, rows, "A note.")


def test_text_and_html_show_the_same_numbers():
    table = _table()
    text, html = table.to_text(), table.to_html()
    for shown in ("−3.1", "10.25", "0.063"):
        assert shown in text
        assert shown in html


def test_text_keeps_within_its_width():
    for width in (80, 50, 30):
        assert max(columns_of(line) for line in _table().to_text(width).splitlines()) <= width


def test_html_is_escaped_and_scoped():
    html = _table().to_html()
    assert "a &amp; &lt;b&gt;" in html
    assert "<b>" not in html
    assert html.count('scope="col"') == 3
    assert html.count('scope="row"') == 2


def test_latex_is_escaped():
    assert latex("50 % of a_b & c") == r"50 \% of a\_b \& c"
    body = _table().to_latex()
    assert r"a \& \textless{}b\textgreater{}" in body
    assert "$-$3.1" in body


def test_csv_holds_unrounded_values_and_empty_for_missing():
    rows = list(csv.reader(io.StringIO(_table().to_csv())))
    assert rows[0] == ["name", "est", "p"]
    assert float(rows[1][1]) == -3.14159
    assert rows[2][2] == ""


def test_a_row_of_the_wrong_length_is_refused():
    with pytest.raises(ValueError, match="2 cells in a table of 1"):
        Table.of("", [Column("a", "a")], [["x", "y"]])


def test_empty_columns_go_and_others_stay():
    columns = (Column("a", "a"), Column("b", "b"), Column("c", "c"))
    table = Table.of("", columns, [["x", Cell(""), "z"], ["y", Cell(""), Cell("")]]).without_empty()
    assert [c.key for c in table.columns] == ["a", "c"]
    assert re.sub(r"\s+", " ", table.to_text()).count("x z") == 1


def test_joiners_that_belong_to_the_spelling_stay_and_turners_of_the_line_go():
    from clingstone.display import clean

    joined = "\u0645\u06cc\u200c\u0634\u0648\u062f \U0001f469\u200d\U0001f33e"  # a Persian verb; a farmer
    assert clean(joined) == joined
    assert clean("a\u202eb\u2066c") == "a\ufffdb\ufffdc"
