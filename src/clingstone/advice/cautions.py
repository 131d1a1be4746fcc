"""The last part of the rule table: what lowers the state, and what only warns."""

from __future__ import annotations

from clingstone.advice.expressions import fact
from clingstone.advice.rule import ANY, GROUP, SERIAL, SHOWN, SPATIAL, Rule, Then

CAVEATS = (
    Rule(
        "mean-in-doubt",
        fact("mean in doubt") & ~fact("curve under dependence"),
        Then("caveat"),
        "A {missing part of the mean} and a dependence between rows explain the same pattern here; these "
        "data cannot tell which it is. The refit with the mean repaired stands beside the advised one.",
        "yue-2002, hamed-2009, florax-de-graaff-2004",
        "strong",
    ),
    Rule(
        "mean-as-well",
        fact("curve under dependence")
        & ~fact("dependence goes with the mean")
        & ~fact("dependence appears with the mean")
        & SHOWN,
        Then("caveat"),
        "A {missing part of the mean} seems to be missing from the model ({sign of the missing part}), and "
        "the dependence stays when it is added: put it into the model as well.",
        "mizon-1995, mcmillen-2003",
        "strong",
    ),
    Rule(
        "after-the-repair",
        fact("curve under dependence") & fact("dependence goes with the mean") & fact("mean in doubt"),
        Then("caution"),
        "That a dependence is no longer seen once the {missing part of the mean} is in does not show that "
        "none is left: it could still widen a focus interval.",
        "florax-de-graaff-2004",
        "strong",
    ),
    Rule(
        "curve-perhaps",
        fact("curve under dependence") & ~SHOWN & (fact("p of the missing part") >= 0.01),
        Then("caution"),
        "A {missing part of the mean} may be missing from the model: look at it before the intervals.",
        "ramsey-1969, stone-koo-1985",
        "strong",
    ),
    Rule(
        "few-groups-caveat",
        GROUP & (fact("groups") < 10),
        Then("caveat"),
        "{groups} groups are few; the interval rests on a small-sample approximation.",
        "cameron-miller-2015",
        "convention",
    ),
    Rule(
        "few-effective-clusters",
        GROUP & fact("focus at group level") & (fact("effective clusters") < 10) & (fact("groups") >= 10),
        Then("caveat"),
        "The {groups} groups are so unequal that they count as {effective clusters} for the focus term.",
        "carter-schnepel-steigerwald-2017",
        "strong",
    ),
    Rule(
        "few-treated-groups",
        GROUP
        & fact("focus at group level")
        & (fact("groups in the smaller arm") >= 3)
        & (fact("groups in the smaller arm") < 6),
        Then("caveat"),
        "Only {groups in the smaller arm} groups carry {term of the smaller arm}; the interval leans on "
        "equal variances in both arms.",
        "mackinnon-webb-2017",
        "strong",
    ),
    Rule(
        "low-df",
        fact("lowest df of the advised refit") < 4,
        Then("caveat"),
        "The advised interval has only {lowest df of the advised refit} degrees of freedom: read it as a "
        "rough range.",
        "tipton-2015, pustejovsky-tipton-2018",
        "convention",
    ),
    Rule(
        "rehearsal-fell-short",
        fact("rehearsal fell short") & ~fact("no rehearsed remedy held"),
        Then("caveat"),
        "Rehearsed on this design, {name of the advised refit} held the true value in {rehearsed coverage} "
        "of replicates under one of the error models tried, below the {promised coverage} it promises.",
        "own",
        "strong",
    ),
    Rule(
        "none-held",
        fact("rehearsal fell short") & fact("no rehearsed remedy held"),
        Then("caveat"),
        "Rehearsed on this design, {name of the advised refit} held the true value in {rehearsed coverage} "
        "of replicates under one of the error models tried, below the {promised coverage} it promises; of "
        "what was rehearsed the best held it in {best rehearsed coverage}.",
        "own",
        "strong",
    ),
    Rule(
        "perhaps-short",
        fact("rehearsal leaves a doubt"),
        Then("caution"),
        "Rehearsed on this design, {name of the advised refit} held the true value in {rehearsed coverage} "
        "of replicates under one of the error models tried; {promised coverage} is promised. A rehearsal "
        "with more replicates tells whether it falls short.",
        "own",
        "strong",
    ),
    Rule(
        "few-outer-groups",
        GROUP & (fact("groups") >= 10) & (fact("fewest groups to cover") < 10),
        Then("caveat"),
        "Of {level with the fewest groups} there are only {fewest groups to cover} groups: what varies "
        "between them is known roughly.",
        "cameron-miller-2015",
        "convention",
    ),
    Rule(
        "one-group-dominates",
        GROUP & (fact("largest share of one group") >= 0.25) & (fact("groups") >= 8),
        Then("caution"),
        "One group holds {largest share of one group} of the information on {term of the largest share}.",
        "mackinnon-nielsen-webb-2023",
        "convention",
    ),
    Rule(
        "short-series",
        SERIAL
        & ~GROUP
        & fact("advised refit models the order in time")
        & (fact("rows in the longest series") < 50)
        & (fact("series") < 20),
        Then("caveat"),
        "With {rows in the longest series} rows the correlation is estimated too low, and the interval is "
        "corrected only in part.",
        "park-mitchell-1980, mcknight-2000",
        "strong",
    ),
    Rule(
        "few-sites",
        SPATIAL & (fact("sites") < 50),
        Then("caveat"),
        "With {sites} sites the range of the dependence is known only roughly.",
        "webster-oliver-2007",
        "convention",
    ),
    Rule(
        "long-range",
        SPATIAL & (fact("range over extent") >= 0.25) & (fact("range over extent") < 0.5),
        Then("caveat"),
        "The dependence reaches over {range over extent} of the map's width; few independent places remain.",
        "muller-watson-2022, webster-oliver-2007",
        "moderate",
    ),
    Rule(
        "wide-range-rough",
        SPATIAL & (fact("range over extent") >= 0.5) & (fact("range over extent") < 1),
        Then("caveat"),
        "The dependence reaches over {range over extent} of the map's width: the map holds only a handful of "
        "places that are nearly independent, and the interval is rough.",
        "muller-watson-2022, bester-conley-hansen-2011",
        "moderate",
    ),
    Rule(
        "robust-in-time",
        SERIAL
        & fact("advised refit models the order in time")
        & (GROUP | (fact("series") >= 10))
        & (fact("robust over advised standard error") > 1.5),
        Then("caveat"),
        "The standard error robust to any dependence inside a group or series is {robust over advised "
        "standard error} times the advised one: slopes that differ, or another order in time, may be left "
        "out.",
        "mackinnon-nielsen-webb-2023, barr-2013",
        "moderate",
    ),
    Rule(
        "not-covered",
        fact("plausible structure not covered"),
        Then("caveat"),
        "The advised refit does not cover dependence between {names not covered}, which could still matter.",
        "own",
        "strong",
    ),
    Rule(
        "not-sized",
        fact("declared but not sized"),
        Then("caution"),
        "These data are too few to size {names not sized}; a silent test says little there.",
        "park-mitchell-1980, webster-oliver-2007",
        "strong",
    ),
    Rule(
        "group-variance-at-zero",
        GROUP & fact("focus at group level") & fact("advised refit has no variance between groups"),
        Then("caveat"),
        "The variance between groups was estimated at zero. With few groups that happens by chance, and "
        "intervals, robust ones too, are then shorter than they should be: the upper end of its interval "
        "leaves room for a standard error {largest factor} times the ordinary one.",
        "self-liang-1987, own",
        "strong",
    ),
    Rule(
        "at-its-bound",
        fact("advised refit at its bound") & ~fact("advised refit has no variance between groups"),
        Then("caution"),
        "The advised model estimates one of its variances or correlations at the edge of the possible range; "
        "such an estimate is rough.",
        "self-liang-1987",
        "strong",
    ),
    Rule(
        "few-treated-redrawn",
        GROUP & fact("focus at group level") & (fact("groups in the smaller arm") < 3),
        Then("caveat"),
        "Only {groups in the smaller arm} groups carry {term of the smaller arm}: the interval leans on the "
        "assignment having been by lot, and on groups of much the same size.",
        "mackinnon-webb-2018",
        "strong",
    ),
    Rule(
        "second-opinion-wider",
        GROUP & (fact("widest second opinion") > 1.25),
        Then("caution"),
        "{name of the widest second opinion} gives {term of the widest second opinion} an interval {widest "
        "second opinion} times as wide as the advised one.",
        "mackinnon-nielsen-webb-2023",
        "moderate",
    ),
    Rule(
        "slopes-may-differ",
        GROUP
        & ~fact("focus at group level")
        & ~fact("advised refit models the order in time")
        & (fact("robust over advised standard error") > 1.5),
        Then("caution"),
        "The robust standard error is {robust over advised standard error} times the advised one, a sign "
        "that slopes differ from group to group.",
        "barr-2013, bell-2019",
        "moderate",
    ),
    Rule(
        "another-order",
        SERIAL
        & fact("advised refit models the order in time")
        & (fact("another order fits better") | fact("first order does not fit")),
        Then("caveat"),
        "Errors along time do not fade geometrically: what a first-order correlation leaves over is "
        "correlated still ({sign against the first order}), or another order fits better. Compare the refit "
        "with ARMA errors or the long-run variance.",
        "ansley-1979, hurvich-tsai-1989",
        "moderate",
    ),
    Rule(
        "may-be-a-random-walk",
        SERIAL & fact("may be a random walk"),
        Then("caution"),
        "The interval of the correlation along time takes in a random walk: consider changes from step to "
        "step.",
        "andrews-1993",
        "moderate",
    ),
    Rule(
        "earlier-response",
        SERIAL & fact("earlier response in the model"),
        Then("caveat"),
        "{name of the earlier response} is the response of an earlier row: with errors that are correlated "
        "along time its coefficient is biased. Add further lags until none is left.",
        "godfrey-1978",
        "strong",
    ),
    Rule(
        "break-in-time",
        SERIAL & fact("break in time"),
        Then("caution"),
        "The level of the residuals seems to change at one time, also with the order in time taken into "
        "account.",
        "andrews-1993",
        "moderate",
    ),
    Rule(
        "crossed-few-groups",
        GROUP & (fact("crossed levels to cover") >= 2) & (fact("groups of the smallest crossed level") < 25),
        Then("caveat"),
        "{crossed levels} cross, and the smallest has {groups of the smallest crossed level} groups: an "
        "interval that covers both ways at once is rough.",
        "cameron-gelbach-miller-2011",
        "convention",
    ),
    Rule(
        "randomisation-beside",
        GROUP
        & fact("assigned or sampled by group")
        & ((fact("groups") < 12) | (fact("groups in the smaller arm") <= 5))
        & fact("randomisation stands beside"),
        Then("caution"),
        "The level was assigned and its groups are few: the randomisation test, which stands beside, rests "
        "on the assignment alone.",
        "rosenbaum-2002, mackinnon-webb-2018",
        "strong",
    ),
    Rule(
        "common-shocks-stay",
        SERIAL & fact("common shocks in time") & ~fact("advised refit sums over each time"),
        Then("caveat"),
        "Different series move together at one time, also with the order in time taken into account, and the "
        "advised refit takes series as independent of each other: effects of the times in the model would "
        "carry that.",
        "driscoll-kraay-1998, hoechle-2007",
        "moderate",
    ),
    Rule(
        "common-shocks",
        SERIAL
        & fact("common shocks")
        & ~fact("common shocks in time")
        & ~fact("advised refit sums over each time"),
        Then("caution"),
        "Different series move together at one time, and the advised refit takes series as independent of "
        "each other: effects of the times in the model would carry that.",
        "driscoll-kraay-1998, hoechle-2007",
        "moderate",
    ),
    Rule(
        "not-converged",
        fact("advised refit did not converge"),
        Then("caveat"),
        "The search for the advised model's parameters did not settle.",
        "own",
        "strong",
    ),
    Rule(
        "not-attributable",
        fact("not attributable"),
        Then("caution"),
        "These data cannot say which of {names not attributable} makes the rows hang together; the advised "
        "refit need not know.",
        "jones-boadi-boateng-1991",
        "strong",
    ),
    Rule(
        "between-differs",
        GROUP & fact("between differs from within"),
        Then("caveat"),
        "Within groups and between groups {term that differs} goes with the response differently: the pooled "
        "coefficient mixes two effects. The refit within and between groups reports both.",
        "mundlak-1978, bell-jones-2015, bell-2019",
        "strong",
    ),
    Rule(
        "spatial-confounding",
        SPATIAL & fact("coefficient moves"),
        Then("caution"),
        "The coefficient of {term that moves} moves by more than its standard error when space enters the "
        "error: a sign of spatial confounding, not of a cleaned estimate.",
        "hodges-reich-2010, paciorek-2010",
        "strong",
    ),
    Rule(
        "estimate-moves",
        (GROUP | SERIAL) & ~SPATIAL & fact("coefficient moves"),
        Then("caution"),
        "The coefficient of {term that moves} moves by more than its standard error when dependence enters "
        "the model: what groups or series keep throughout may go with the predictor. Compare its effect "
        "within them.",
        "mundlak-1978, bell-jones-2015",
        "strong",
    ),
    Rule(
        "unequal-variances",
        fact("unequal variances") & ~fact("advised refit allows unequal spread"),
        Then("caution"),
        "The residuals spread unequally; intervals that assume equal spread may be off.",
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
