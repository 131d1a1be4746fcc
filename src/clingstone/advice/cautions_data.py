"""Cautions about the rows themselves, the sample, and the choice."""

from __future__ import annotations

from clingstone.advice.expressions import fact
from clingstone.advice.rule import ANY, GROUP, Rule, Then

DATA = (
    Rule(
        "unequal-variances",
        fact("unequal variances") & ~fact("advised refit allows unequal spread"),
        Then("caution"),
        "The residuals spread unequally; intervals that assume equal spread may be off.",
        "white-1980, mackinnon-white-1985",
        "strong",
    ),
    Rule(
        "two-valued-response",
        fact("response of two values"),
        Then("caution"),
        "The response takes two values: coefficients are differences of a probability, rows spread as that "
        "probability does, and shares and correlations are on its own bounded scale. Intervals hold in large "
        "samples where unequal spread is allowed for; nothing is claimed about odds.",
        "white-1980, mackinnon-white-1985",
        "strong",
    ),
    Rule(
        "count-response",
        fact("response of counts"),
        Then("caution"),
        "The response looks like counts: coefficients are differences of a mean count, and rows of a larger "
        "mean spread more. Intervals hold in large samples where unequal spread is allowed for; nothing is "
        "claimed about rates or ratios.",
        "white-1980, mackinnon-white-1985",
        "strong",
    ),
    Rule(
        "outlying-rows",
        fact("outlying rows"),
        Then("caution"),
        "Single rows lie far from the rest and may carry the result.",
        "cook-weisberg-1982",
        "strong",
    ),
    Rule(
        "many-copies",
        fact("share of copied rows") >= 0.1,
        Then("caveat"),
        "{share of copied rows} of the rows copy an earlier row in every column used: if they were entered "
        "twice, they add nothing, pass for dependence, and should be dropped before anything is read.",
        "own",
        "strong",
    ),
    Rule(
        "all-groups-in-sample",
        GROUP & fact("assigned or sampled by group"),
        Then("caution"),
        "If the table holds most of all the groups there are, the interval is on the wide side.",
        "abadie-2023",
        "moderate",
    ),
    Rule(
        "chosen-after-looking",
        ANY & ~fact("assigned or sampled by group"),
        Then("caution"),
        "The correction was chosen after looking at the residuals; a choice fixed beforehand outranks it.",
        "leeb-potscher-2005",
        "strong",
    ),
)
