"""Which remedy is preferred: the second part of the rule table, the first that holds and could be fitted."""

from __future__ import annotations

from clingstone.advice.expressions import fact
from clingstone.advice.rule import ANY, GROUP, SERIAL, SLOPES, SPATIAL, SPREAD, Rule, Then
from clingstone.needs import Limits

PREFER = (
    Rule(
        "slopes-alone",
        ~ANY & SLOPES & (fact("df of the robust refit") >= 4),
        Then("prefer", "cluster-robust", at="group level", firm=True),
        "Slopes of {name of the slope} differ between groups, which makes the rows of a group go together "
        "where the slope is in question: the robust covariance allows for it.",
        "barr-2013, bell-2019",
        "strong",
    ),
    Rule(
        "slopes-in-time",
        SERIAL & ~SPATIAL & SLOPES & fact("series within groups") & (fact("df of the robust refit") >= 4),
        Then("prefer", "cluster-robust", at="group level", firm=True),
        "Slopes of {name of the slope} differ between groups, which no rehearsal here draws, and rows follow "
        "each other in time: the robust covariance allows for both.",
        "barr-2013, bell-2019, hansen-2007",
        "strong",
    ),
    Rule(
        "spread-alone",
        ~ANY & SPREAD,
        Then("prefer", "heteroscedasticity-robust", firm=True),
        "The residuals spread unequally with {what the spread goes with}, and nothing else has to be "
        "covered: a covariance that gives every row its own variance is enough.",
        "white-1980, mackinnon-white-1985",
        "strong",
    ),
    Rule(
        "slopes-in-groups",
        GROUP
        & ~SERIAL
        & ~SPATIAL
        & SLOPES
        & ~fact("focus at group level")
        & (fact("df of the robust refit") >= 4),
        Then("prefer", "cluster-robust", at="group level", firm=True),
        "Slopes of {name of the slope} differ between groups, which a random intercept leaves out; the "
        "robust covariance allows for that and for rows of a group that go together.",
        "barr-2013, bell-2019, cameron-miller-2015",
        "strong",
    ),
    Rule(
        "spread-in-groups",
        GROUP
        & ~SERIAL
        & ~SPATIAL
        & SPREAD
        & ~fact("focus at group level")
        & (fact("df of the robust refit") >= 4),
        Then("prefer", "cluster-robust", at="group level", firm=True),
        "The residuals spread unequally with {what the spread goes with}; the robust covariance allows for "
        "that and for rows of a group that go together.",
        "white-1980, cameron-miller-2015",
        "strong",
    ),
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
        "few-groups-in-time",
        GROUP
        & SERIAL
        & ~SPATIAL
        & fact("series within groups")
        & fact("focus at group level")
        & (fact("groups") < 20),
        Then("prefer", "group-means", at="group level"),
        "A focus term varies only between {groups} groups: a regression of their means needs to know nothing "
        "of the order in time within them.",
        "leyrat-2018, bertrand-2004",
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
        "robust-over-groups",
        GROUP
        & SERIAL
        & ~SPATIAL
        & fact("series within groups")
        & (fact("groups") >= 20)
        & (fact("df of the robust refit over whole series") >= 4)
        & (fact("robust over ordered standard error") > 1.5),
        Then("prefer", "cluster-robust", at="group level", firm=True),
        "Over {groups} groups the standard error that is robust to any dependence inside them is {robust "
        "over ordered standard error} times that of a model of the order in time: it leaves something out.",
        "hansen-2007, kezdi-2003, barr-2013",
        "moderate",
    ),
    Rule(
        "robust-over-series",
        SERIAL
        & ~GROUP
        & ~SPATIAL
        & (fact("series") >= 20)
        & (fact("df of the robust refit over whole series") >= 4)
        & (fact("robust over ordered standard error") > 1.5),
        Then("prefer", "cluster-robust", at="series level", firm=True),
        "Over {series} series the standard error that is robust to any dependence inside them is {robust "
        "over ordered standard error} times that of a model of the order in time: it leaves something out.",
        "hansen-2007, kezdi-2003",
        "moderate",
    ),
    Rule(
        "own-estimates",
        GROUP
        & ~SPATIAL
        & ~fact("focus at group level")
        & (fact("df of the robust refit") < 4)
        & (SLOPES | (fact("robust over mixed standard error") > 1.5))
        & ~fact("slope model settled"),
        Then("prefer", "group-t", at="group level"),
        "Slopes seem to differ between groups, and the robust covariance has only {df of the robust refit} "
        "degrees of freedom: an estimate from each group and a t over them rests on neither a model of the "
        "groups nor one of their order in time.",
        "ibragimov-muller-2010",
        "moderate",
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
        GROUP
        & ~SERIAL
        & ~SPATIAL
        & ~fact("focus at group level")
        & (
            (fact("effective clusters") >= 10)
            | ((fact("df of the robust refit") >= 4) & ~fact("between differs from within"))
        ),
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
        "common-shocks-in-time",
        SERIAL
        & ~GROUP
        & ~SPATIAL
        & fact("common shocks in time")
        & (fact("periods") >= Limits().periods_estimate)
        & fact("focus varies over time"),
        Then("prefer", "panel-hac"),
        "Different series move together at one time, over {periods} times: only the sums over all series at "
        "a time are taken as a series of their own.",
        "driscoll-kraay-1998, vogelsang-2012",
        "moderate",
    ),
    Rule(
        "irregular-times",
        SERIAL & ~GROUP & ~SPATIAL & (~fact("regular times") | fact("times shared")),
        Then("prefer", "car1"),
        "The times are spaced unequally or shared by rows: a correlation that fades with elapsed time takes "
        "them as they are.",
        "jones-1980",
        "strong",
    ),
    Rule(
        "another-order-in-time",
        SERIAL
        & ~GROUP
        & ~SPATIAL
        & (fact("rows in the longest series") >= 60)
        & (fact("first order does not fit") | fact("another order fits better") | SPREAD),
        Then("prefer", "hac", firm=True),
        "A correlation that fades geometrically does not fit these errors, or their spread changes: the "
        "long-run variance is estimated without a model of the dependence.",
        "lazarus-2018, kiefer-vogelsang-2005",
        "strong",
    ),
    # Coverage of 95 % intervals for a trend, a step and a slow cycle, the worst of three (1,000 draws each,
    # refits alone; noise beside the process, of variance 0.49 to its 1; Monte-Carlo error 0.7 to 1.4 points):
    #
    #     rows                       40           100          300
    #     ρ                       0.7  0.9      0.7  0.9     0.7  0.9
    #     AR(1)          ar1     0.93 0.92     0.95 0.93    0.94 0.94
    #                    hac     0.92 0.85     0.93 0.83    0.93 0.85
    #     under noise    ar1     0.90 0.72     0.90 0.73    0.88 0.69
    #                    hac     0.93 0.86     0.93 0.84    0.94 0.86
    #
    # What ar1 loses under noise, "another-order-in-time" sees from 300 rows on (ρ = 0.9: 96 % of 200 draws,
    # at 100 rows 38 to 41 %). Ar1 where the first order fits, else hac, then covers 0.83 to 0.90 there, hac
    # alone 0.84 to 0.91; under AR(1) 0.91 to 0.98, hac alone 0.84 to 0.92. With fewer rows hac is safer.
    Rule(
        "smooth-focus-in-time",
        SERIAL
        & ~GROUP
        & ~SPATIAL
        & (fact("rows in the longest series") >= 100)
        & (fact("rows in the longest series") < 300)
        & fact("regular times")
        & fact("focus smooth in time"),
        Then("prefer", "hac"),
        "The focus terms run smoothly along time, where a model of the errors gains little and misleads if "
        "it is wrong, and {rows in the longest series} rows are too few to see that: they give the long-run "
        "variance without one.",
        "lazarus-2018, kiefer-vogelsang-2005, own",
        "moderate",
    ),
    Rule(
        "another-short-order",
        SERIAL & ~GROUP & ~SPATIAL & fact("another order fits better"),
        Then("prefer", "arma"),
        "Errors along time of another order than the first fit these data better.",
        "ansley-1979, hurvich-tsai-1989",
        "moderate",
    ),
    Rule(
        "serial-model",
        SERIAL & ~GROUP & ~SPATIAL,
        Then("prefer", "ar1"),
        "A correlation that fades geometrically fits the {rows in the longest series} rows of the longest "
        "series, and a model that fits gives the shorter interval.",
        "park-mitchell-1980, lazarus-2018",
        "moderate",
    ),
    Rule(
        "places-that-touch",
        SPATIAL & ~GROUP & ~SERIAL & fact("neighbours by borders or pairs"),
        Then("prefer", "spatial-error"),
        "Neighbours were given as borders or pairs: an error that passes along them asks for no distance "
        "between places.",
        "dormann-2007, ord-1975",
        "moderate",
    ),
    Rule(
        "rows-of-one-place",
        SPATIAL
        & ~GROUP
        & ~SERIAL
        & ~fact("spatial estimable")
        & fact("rows of one place alone")
        & fact("focus varies within places")
        & (fact("df of the robust refit over places") >= 4),
        Then("prefer", "cluster-robust", at="site level", firm=True),
        "{sites} places are too few to size a dependence that fades with distance, but the focus terms vary "
        "within places: the robust covariance allows the rows of one place to depend on each other in any "
        "way.",
        "barr-2013, cameron-miller-2015, pustejovsky-tipton-2018",
        "moderate",
    ),
    Rule(
        "range-past-the-map",
        SPATIAL
        & ~GROUP
        & ~SERIAL
        & (fact("range at its bound") | (fact("range over extent") >= 1))
        & fact("focus settled at any range"),
        Then("prefer", "spatial-gls"),
        "The dependence reaches past the map, but the focus terms vary at shorter distances: their standard "
        "errors hardly move over all ranges that go with these data, so a fitted covariance serves them.",
        "besag-higdon-1999, stein-1999",
        "moderate",
    ),
    Rule(
        "range-not-found",
        SPATIAL & ~GROUP & ~SERIAL & fact("range at its bound"),
        Then("prefer", "spatial-components"),
        "The range of the dependence was estimated at the end of what is tried, and a fitted covariance "
        "leans on it: spatial components hold their level over every dependence up to a stated strength.",
        "muller-watson-2022",
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
