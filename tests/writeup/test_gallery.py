"""Figures in the hands of the user: whole ones, and those drawn into axes of their own."""

from __future__ import annotations

from dataclasses import replace

import pytest
from matplotlib.figure import Figure

from clingstone.needs import InputError
from clingstone.writeup import gallery
from clingstone.writeup.save import plates
from clingstone.writeup.shown import Shown
from tests.writeup import fixture


def _axes():
    return Figure().add_subplot()


def test_every_figure_is_had_by_its_name_and_can_be_restyled():
    results = fixture.trial()
    named = gallery.names(results)
    assert list(named) == [p.name for p in plates(results)]
    for name in named:
        figure = gallery.figure(results, name, 400)
        assert figure.get_size_inches()[0] == pytest.approx(400 / 72)
        figure.axes[0].set_title("mine")
        assert "mine" in [ax.get_title() for ax in figure.axes]


def test_a_name_that_is_no_figure_is_refused_with_near_ones():
    with pytest.raises(InputError, match="no figure ‘interval’") as caught:
        gallery.figure(fixture.trial(), "interval")
    assert "‘intervals’" in caught.value.hint


def test_intervals_in_axes_of_ones_own_lie_where_the_rows_say():
    results = fixture.trial()
    ax = gallery.draw_intervals(results, _axes(), "arm: treated")
    labels = [t.get_text() for t in ax.get_yticklabels()]
    assert labels[0] == "advised: mixed model, intercept per clinic"
    drawn = {
        (round(float(x[0]), 6), round(float(x[1]), 6)): float(y[0])
        for line in ax.get_lines()
        if len(x := line.get_xdata()) == 2 and (y := line.get_ydata())[0] == y[1]
    }
    for fit in results.refits:
        row = fit.get("arm: treated")
        assert (round(row.low, 6), round(row.high, 6)) in drawn
    best = results.refits[1].get("arm: treated")
    assert drawn[round(best.low, 6), round(best.high, 6)] == 0.0
    assert "95" in ax.get_xlabel()
    assert gallery.draw_intervals(results, _axes()).get_xlabel() == ax.get_xlabel()  # the first in focus


def test_shares_in_axes_of_ones_own():
    results = fixture.trial()
    ax = gallery.draw_shares(results, _axes())
    assert [t.get_text() for t in ax.get_yticklabels()] == [s.label for s in results.ledger.shares]
    dots = [float(line.get_xdata()[0]) for line in ax.get_lines() if len(line.get_xdata()) == 1]
    assert dots == [s.share for s in results.ledger.shares]


def test_what_was_not_fitted_is_not_drawn():
    base = fixture.trial()
    with pytest.raises(InputError, match="no interval"):
        gallery.draw_intervals(replace(base, refits=()), _axes())
    with pytest.raises(InputError, match="no interval for ‘ages’"):
        gallery.draw_intervals(base, _axes(), "ages")
    with pytest.raises(InputError, match="no share"):
        gallery.draw_shares(replace(base, ledger=replace(base.ledger, shares=())), _axes())


def test_an_examination_shows_itself_in_every_way_from_its_results_alone():
    class Held(Shown):
        results = fixture.trial()

    held = Held()
    assert held.methods() == held.results.methods
    assert held.methods("latex").startswith(r"\documentclass")
    assert held.methods("word")[:2] == b"PK"
    with pytest.raises(InputError, match="no methods text as ‘words’") as caught:
        held.methods("words")
    assert "‘word’" in caught.value.hint
    assert held.figures == gallery.names(held.results)
    assert held.figure().axes
    assert held.draw_intervals(_axes()).get_lines()
    assert held.draw_shares(_axes()).get_lines()
    assert "<svg" in held._repr_html_()
    assert held.report().startswith("<!doctype html>")
    assert str(held)
    assert "trial" in repr(held) or held.results.case.name in repr(held)
