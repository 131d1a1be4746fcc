"""States that come before any remedy: the first part of the rule table."""

from __future__ import annotations

from clingstone.advice.expressions import fact
from clingstone.advice.rule import ANY, GROUP, KNOWN, SERIAL, SHOWN, SLOPES, SPATIAL, SPREAD, Rule, Then

STATES = (
    Rule(
        "nothing-left",
        fact("nothing left over"),
        Then("state", "not correctable", needed="a model that leaves something over"),
        "The model fits every row exactly: look for the response, or a copy of it, among the predictors.",
        "own",
        "strong",
    ),
    Rule(
        "residuals-alone",
        ~KNOWN & SHOWN,
        Then("state", "not correctable", needed="the data and the model formula, not residuals alone"),
        "Something hangs together, but from residuals alone no interval can be recomputed.",
        "own",
        "strong",
    ),
    Rule(
        "mean-first",
        fact("part under dependence")
        & fact("dependence goes with the mean")
        & ~fact("dependence stays with the mean")
        & ~fact("dependence appears with the mean"),
        Then("state", "mean first"),
        "A {missing part of the mean} explains what looked like dependence ({sign of the missing part}).",
        "mizon-1995, mcmillen-2003, florax-de-graaff-2004",
        "strong",
    ),
    Rule(
        "mean-then-dependence",
        fact("part under dependence")
        & (fact("dependence goes with the mean") | fact("dependence appears with the mean")),
        Then("state", "mean first"),
        "A {missing part of the mean} changes what the dependence looks like ({sign of the missing part}): "
        "mend the mean first, then correct for what stays.",
        "mizon-1995, mcmillen-2003, yue-2002",
        "strong",
    ),
    Rule(
        "season-first",
        fact("part under dependence") & fact("clear season"),
        Then("state", "mean first"),
        "A {missing part of the mean} shows beyond any dependence that fades with time ({sign of the missing "
        "part}): put it into the model, then correct for what stays.",
        "mizon-1995, yue-2002, hamed-2009",
        "strong",
    ),
    Rule(
        "mean-alone",
        fact("part under dependence") & ~SHOWN & (fact("p of the missing part") < 0.01),
        Then("state", "mean first"),
        "A {missing part of the mean} seems to be missing from the model ({sign of the missing part}): put "
        "it in before the intervals are read.",
        "ramsey-1969, stone-koo-1985",
        "strong",
    ),
    Rule(
        "nothing-to-cover",
        (~ANY & ~SPREAD & ~SLOPES) | (~KNOWN & ~SHOWN),
        Then("state", "nothing found"),
        "No structure was found, and none whose interval still leaves room to move a focus interval.",
        "own",
        "strong",
    ),
    Rule(
        "two-treated-groups",
        GROUP
        & fact("focus at group level")
        & (fact("groups in the smaller arm") < 3)
        & ~fact("assignment can be redrawn"),
        Then(
            "state",
            "not correctable",
            needed="at least 3 and better 6 groups in each arm, or a randomisation test of the assignment",
        ),
        "Only {groups in the smaller arm} of {groups} groups carry {term of the smaller arm}: no standard "
        "error can be trusted for it.",
        "mackinnon-webb-2017, mackinnon-webb-2018",
        "strong",
    ),
    Rule(
        "too-few-groups",
        GROUP & fact("focus at group level") & (fact("groups") < 5),
        Then("state", "not correctable", needed="at least 5 groups, better 10 or more"),
        "{groups} groups are too few to size the variation between groups, and a focus term varies only "
        "between them.",
        "leyrat-2018, mcneish-stapleton-2016",
        "strong",
    ),
    Rule(
        "groups-as-factor",
        GROUP & ~fact("focus at group level") & (fact("groups") < 5),
        Then(
            "state", "not correctable", needed="the groups as a factor in the model, which then carries them"
        ),
        "{groups} groups are too few for any correction between them; as a factor in the model they need "
        "none.",
        "gomes-2022, oberpriller-2022",
        "moderate",
    ),
    Rule(
        "series-too-short",
        SERIAL & ~fact("serial estimable") & ~fact("series can be clusters"),
        Then("state", "not correctable", needed="one series of 20 times, or 8 series of 5"),
        "The longest series has {rows in the longest series} rows: too short to size the dependence in time, "
        "and the series are too few to be clusters.",
        "park-mitchell-1980, krone-2016",
        "strong",
    ),
    Rule(
        "season-in-errors",
        SERIAL & ~GROUP & ~SPATIAL & fact("correlation that returns") & fact("first order does not fit"),
        Then(
            "state",
            "not correctable",
            needed="the cycle as terms of the model, or the response one cycle earlier among the predictors",
        ),
        "What the model leaves over comes back after {steps of the return} steps: a cycle, which no refit "
        "here carries.",
        "ljung-box-1978",
        "moderate",
    ),
    Rule(
        "sites-too-few",
        SPATIAL
        & ~fact("spatial estimable")
        & ~(fact("rows of one place alone") & fact("focus varies within places")),
        Then("state", "not correctable", needed="20 distinct sites, better 50"),
        "{sites} distinct sites are too few to size a dependence that fades with distance.",
        "webster-oliver-2007",
        "moderate",
    ),
    Rule(
        "range-too-long",
        SPATIAL
        & fact("spatial present")
        & (fact("range over extent") >= 1)
        & ~fact("focus settled at any range")
        & ~fact("mean in doubt"),
        Then(
            "state",
            "not correctable",
            needed="sites over an area at least twice as wide as the range, or a predictor that varies "
            "at shorter distances",
        ),
        "The dependence reaches {range over extent} of the map's width: the map holds hardly more than "
        "one independent place.",
        "muller-watson-2022, bester-conley-hansen-2011",
        "strong",
    ),
)

# Speaks when no refit covers what has to be covered; settle() names it, no fact does.
NO_REMEDY = Rule(
    "no-remedy-covers",
    ANY & ~fact("some refit covers it"),
    Then("state", "not correctable", needed="more groups, longer series or more sites, as the refusals say"),
    "No correction that these data can carry covers {names to cover}.",
    "own",
    "strong",
)

NOTHING = next(r for r in STATES if r.id == "nothing-to-cover")
