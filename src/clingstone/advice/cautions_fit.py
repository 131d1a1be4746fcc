"""Cautions about the advised refit: what its error model leaves out, or found at an edge."""

from __future__ import annotations

from clingstone.advice.expressions import fact
from clingstone.advice.rule import GROUP, SERIAL, SPATIAL, Rule, Then

FIT = (
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
        "one-axis",
        SPATIAL & fact("likeness along one axis"),
        Then("caution"),
        "Places are more alike along one axis of the map than across it; a dependence that fades with "
        "distance alone is then only roughly right.",
        "cliff-ord-1981",
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
)
