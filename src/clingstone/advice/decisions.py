"""The first half of the rule table: states that come before any remedy, and which remedy is preferred."""

from __future__ import annotations

from clingstone.advice.expressions import fact
from clingstone.advice.rule import ANY, GROUP, KNOWN, SERIAL, SHOWN, SPATIAL, Rule, Then

# ---- states that come before any remedy --------------------------------------------------------

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
        fact("curve under dependence")
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
        fact("curve under dependence")
        & (fact("dependence goes with the mean") | fact("dependence appears with the mean")),
        Then("state", "mean first"),
        "A {missing part of the mean} changes what the dependence looks like ({sign of the missing part}): "
        "mend the mean first, then correct for what stays.",
        "mizon-1995, mcmillen-2003, yue-2002",
        "strong",
    ),
    Rule(
        "nothing-to-cover",
        ~ANY | (~KNOWN & ~SHOWN),
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
        "gomes-2022, oberpriller-2021",
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
        "sites-too-few",
        SPATIAL & ~fact("spatial estimable"),
        Then("state", "not correctable", needed="20 distinct sites, better 50"),
        "{sites} distinct sites are too few to size a dependence that fades with distance.",
        "webster-oliver-2007",
        "moderate",
    ),
    Rule(
        "range-too-long",
        SPATIAL & fact("spatial present") & (fact("range over extent") >= 0.5),
        Then(
            "state",
            "not correctable",
            needed="sites over an area at least twice as wide as the range, or a predictor that varies "
            "at shorter distances",
        ),
        "The dependence reaches {range over extent} of the map's width: the map holds hardly more than one "
        "independent place.",
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

# ---- which remedy, the first that holds and could be fitted ----------------------------------------

PREFER = (
    Rule(
        "few-treated-by-lot",
        GROUP
        & fact("focus at group level")
        & (fact("groups in the smaller arm") < 3)
        & fact("assignment can be redrawn"),
        Then("prefer", "randomisation", at="assigned level", firm=True),
        "Only {groups in the smaller arm} of {groups} groups carry {term of the smaller arm}, where every "
        "standard error fails; it was assigned, and the assignment can be drawn again.",
        "mackinnon-webb-2018, fisher-1935",
        "strong",
    ),
    Rule(
        "many-short-series",
        GROUP
        & SERIAL
        & ~SPATIAL
        & fact("series within groups")
        & (fact("effective clusters") >= 10)
        & (((fact("groups") >= 20) & (fact("rows in the longest series") <= 20)) | (fact("groups") >= 40)),
        Then("prefer", "cluster-robust", at="group level"),
        "{groups} groups with at most {rows in the longest series} times each: rows of a group may depend on "
        "each other in any way, in time as well, and the robust covariance carries it.",
        "hansen-2007, kezdi-2003, bertrand-2004",
        "strong",
    ),
    Rule(
        "short-series-in-groups",
        GROUP & SERIAL & ~SPATIAL & fact("series within groups") & ~fact("serial estimable"),
        Then("prefer", "cluster-robust", at="group level"),
        "Series of at most {rows in the longest series} times are too short for a model of the order in "
        "time; the robust covariance allows rows of a group to depend on each other in any way.",
        "hansen-2007, kezdi-2003, bertrand-2004",
        "strong",
    ),
    Rule(
        "within-focus-in-time",
        GROUP
        & SERIAL
        & ~SPATIAL
        & fact("series within groups")
        & ~fact("focus at group level")
        & (fact("effective clusters") >= 10),
        Then("prefer", "cluster-robust", at="group level"),
        "The focus terms vary within groups, where their slopes may differ from group to group and rows "
        "follow each other in time: the robust covariance allows for both.",
        "barr-2013, bell-2019, hansen-2007",
        "strong",
    ),
    Rule(
        "several-structures",
        (GROUP & SERIAL) | (GROUP & SPATIAL) | (SERIAL & SPATIAL),
        Then("prefer", "joint"),
        "More than one structure has to be covered, and one error model carries them together.",
        "jones-boadi-boateng-1991, baltagi-li-1995",
        "moderate",
    ),
    Rule(
        "crossed-groups",
        GROUP
        & ~SERIAL
        & ~SPATIAL
        & ~fact("focus at group level")
        & (fact("crossed levels to cover") >= 2)
        & (fact("groups of the smallest crossed level") >= 25),
        Then("prefer", "multiway-cluster", at="crossed levels"),
        "{crossed levels} cross, each with at least {groups of the smallest crossed level} groups: rows that "
        "share either may depend on each other in any way.",
        "cameron-gelbach-miller-2011",
        "weak",
    ),
    Rule(
        "variance-at-zero",
        GROUP
        & ~SERIAL
        & ~SPATIAL
        & fact("focus at group level")
        & (fact("groups") < 40)
        & fact("mixed refit at its bound"),
        Then("prefer", "mixed-intercept", at="mixed level", firm=True),
        "The variance between groups was estimated at zero: by the same chance the robust interval is at its "
        "shortest, while that of the random intercept keeps its degrees of freedom and fails less often.",
        "kenward-roger-1997, own",
        "moderate",
    ),
    Rule(
        "few-groups",
        GROUP & ~SERIAL & ~SPATIAL & fact("focus at group level") & (fact("groups") < 40),
        Then("prefer", "mixed-intercept", at="mixed level"),
        "A focus term varies only between groups and {groups} groups are few: restricted likelihood with "
        "small-sample degrees of freedom keeps its level there.",
        "leyrat-2018, kenward-roger-1997, elff-2021",
        "strong",
    ),
    Rule(
        "few-groups-means",
        GROUP & ~SERIAL & ~SPATIAL & fact("focus at group level") & (fact("groups") < 40),
        Then("prefer", "group-means", at="group level"),
        "A focus term varies only between groups and {groups} groups are few: a regression of their means "
        "keeps its level there.",
        "leyrat-2018",
        "strong",
    ),
    Rule(
        "many-groups",
        GROUP
        & ~SERIAL
        & ~SPATIAL
        & fact("focus at group level")
        & (fact("groups") >= 40)
        & (fact("effective clusters") >= 10),
        Then("prefer", "cluster-robust", at="group level"),
        "{groups} groups are enough for the robust covariance, which asks nothing of the dependence inside "
        "a group.",
        "imbens-kolesar-2016, pustejovsky-tipton-2018",
        "strong",
    ),
    Rule(
        "random-slopes",
        GROUP
        & ~SERIAL
        & ~SPATIAL
        & ~fact("focus at group level")
        & (fact("effective clusters") < 10)
        & fact("slope model settled")
        & (fact("robust over mixed standard error") > 1.5),
        Then("prefer", "mixed-slope", firm=True),
        "The robust standard error is {robust over mixed standard error} times that of the random intercept: "
        "the slopes seem to differ from group to group, and a model in which they do fits.",
        "barr-2013, bell-2019",
        "strong",
    ),
    Rule(
        "slopes-differ",
        GROUP
        & ~SERIAL
        & ~SPATIAL
        & ~fact("focus at group level")
        & (fact("df of the robust refit") >= 4)
        & (fact("robust over mixed standard error") > 1.5),
        Then("prefer", "cluster-robust", at="group level", firm=True),
        "The robust standard error is {robust over mixed standard error} times that of the random intercept: "
        "the slopes seem to differ from group to group, which a random intercept leaves out.",
        "barr-2013, bell-2019",
        "strong",
    ),
    Rule(
        "within-focus",
        GROUP & ~SERIAL & ~SPATIAL & ~fact("focus at group level") & (fact("effective clusters") >= 10),
        Then("prefer", "cluster-robust", at="group level"),
        "The focus terms vary within groups, where their slopes may differ from group to group: the robust "
        "covariance allows for that, a plain random intercept does not.",
        "barr-2013, bell-2019, cameron-miller-2015",
        "strong",
    ),
    Rule(
        "group-otherwise",
        GROUP & ~SERIAL & ~SPATIAL,
        Then("prefer", "mixed-intercept", at="mixed level"),
        "With {effective clusters} effective clusters the robust covariance rests on too little; the random "
        "intercept borrows strength from its model.",
        "carter-schnepel-steigerwald-2017, imbens-kolesar-2016",
        "strong",
    ),
    Rule(
        "series-as-clusters",
        SERIAL
        & ~GROUP
        & ~SPATIAL
        & (
            ((fact("series") >= 10) & (fact("rows in the longest series") <= 20))
            | (fact("series can be clusters") & ~fact("serial estimable"))
        ),
        Then("prefer", "cluster-robust", at="series level"),
        "{series} series of at most {rows in the longest series} times: from series so short a correlation "
        "comes out too low, while as clusters each may depend on itself in any way.",
        "hansen-2007, kezdi-2003, bertrand-2004, park-mitchell-1980",
        "strong",
    ),
    Rule(
        "long-regular-series",
        SERIAL & ~GROUP & ~SPATIAL & (fact("rows in the longest series") >= 200) & fact("regular times"),
        Then("prefer", "hac"),
        "{rows in the longest series} equally spaced rows: the long-run variance can be estimated without a "
        "model of the dependence.",
        "lazarus-2018, kiefer-vogelsang-2005",
        "strong",
    ),
    Rule(
        "serial-model",
        SERIAL & ~GROUP & ~SPATIAL,
        Then("prefer", "ar1"),
        "{rows in the longest series} rows in the longest series: with so few, a model of the dependence "
        "does better than a long-run variance.",
        "park-mitchell-1980, lazarus-2018",
        "moderate",
    ),
    Rule(
        "spatial-model",
        SPATIAL & ~GROUP & ~SERIAL,
        Then("prefer", "spatial-gls"),
        "{sites} sites and a dependence that fades within {range over extent} of the map's width: its "
        "covariance can be fitted.",
        "dormann-2007, beale-2010",
        "moderate",
    ),
)
