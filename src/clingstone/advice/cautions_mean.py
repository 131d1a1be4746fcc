"""Cautions about the mean: a part that may be missing, and coefficients that mix or move."""

from __future__ import annotations

from clingstone.advice.expressions import fact
from clingstone.advice.rule import GROUP, SERIAL, SHOWN, SPATIAL, Rule, Then

MEAN = (
    Rule(
        "mean-in-doubt",
        fact("mean in doubt") & ~fact("part under dependence"),
        Then("caveat"),
        "A {missing part of the mean} and a dependence between rows explain the same pattern here; these "
        "data cannot tell which it is. The refit with the mean repaired stands beside the advised one.",
        "yue-2002, hamed-2009, florax-de-graaff-2004",
        "strong",
    ),
    Rule(
        "mean-as-well",
        fact("part under dependence")
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
        fact("part under dependence") & fact("dependence goes with the mean") & fact("mean in doubt"),
        Then("caution"),
        "That a dependence is no longer seen once the {missing part of the mean} is in does not show that "
        "none is left: it could still widen a focus interval.",
        "florax-de-graaff-2004",
        "strong",
    ),
    Rule(
        "curve-perhaps",
        fact("part under dependence") & ~SHOWN & (fact("p of the missing part") >= 0.01),
        Then("caution"),
        "A {missing part of the mean} may be missing from the model: look at it before the intervals.",
        "ramsey-1969, stone-koo-1985",
        "strong",
    ),
    Rule(
        "step-chosen",
        fact("part under dependence") & fact("step of unknown time"),
        Then("caution"),
        "The time of the step is the one that fits best; the refit takes it as known, so its interval is on "
        "the short side. Put in the event that you know of, at its own time.",
        "andrews-1993",
        "strong",
    ),
    Rule(
        "break-in-time",
        SERIAL & fact("break in time") & ~fact("step of unknown time"),
        Then("caution"),
        "The level of the residuals seems to change at one time, also with the order in time taken into "
        "account.",
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
        "between-differs",
        GROUP & fact("between differs from within"),
        Then("caveat"),
        "Within groups and between groups {term that differs} goes with the response differently: the pooled "
        "coefficient mixes two effects. The refit within and between groups reports both.",
        "mundlak-1978, bell-jones-2015, bell-2019",
        "strong",
    ),
    Rule(
        "predictors-differ-together",
        GROUP & fact("predictors differ together") & ~fact("between differs from within"),
        Then("caution"),
        "Tested at once, the predictors go with the response otherwise between groups of {level of the "
        "predictors together} than within them ({p of the predictors together}), though none stands out: "
        "pooled coefficients may mix two effects. The refit within and between groups reports both.",
        "mundlak-1978, bell-jones-2015",
        "strong",
    ),
    Rule(
        "neighbours-outcomes",
        SPATIAL & fact("outcomes of neighbours"),
        Then("caution"),
        "Outcomes of neighbouring places seem to have a part in the mean, beside what errors do ({p of the "
        "outcomes of neighbours}). A model that holds them asks another question, of effects that spill "
        "over, and no refit here answers it.",
        "anselin-1996, anselin-florax-1995",
        "moderate",
    ),
    Rule(
        "spatial-confounding",
        SPATIAL & fact("coefficient moves"),
        Then("caution"),
        "When space enters the error, an estimate moves by more than its standard error ({term that moves}): "
        "a sign of spatial confounding, not of a cleaned estimate.",
        "hodges-reich-2010, paciorek-2010",
        "strong",
    ),
    Rule(
        "estimate-moves",
        (GROUP | SERIAL) & ~SPATIAL & fact("coefficient moves"),
        Then("caution"),
        "When dependence enters the model, an estimate moves by more than its standard error ({term that "
        "moves}): what groups or series keep throughout may go with the predictor. Compare its effect within "
        "them.",
        "mundlak-1978, bell-jones-2015",
        "strong",
    ),
)
