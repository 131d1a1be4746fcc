"""Cautions from a rehearsal of the advice on the user's own design."""

from __future__ import annotations

from clingstone.advice.expressions import fact
from clingstone.advice.rule import Rule, Then

REHEARSED = (
    Rule(
        "not-rehearsed",
        fact("advised refit not rehearsed"),
        Then("caution"),
        "The rehearsal left out the advised refit ({name of the advised refit}): how often its interval "
        "holds the true value on this design is not known.",
        "own",
        "convention",
    ),
    Rule(
        "fragile",
        fact("rehearsal fell short") & fact("held as fitted"),
        Then("caveat"),
        "Rehearsed on this design, {name of the advised refit} kept its promise under every error model that "
        "was fitted, but held the true value in only {rehearsed coverage} of replicates under one that was "
        "not ({truth of the rehearsed coverage}): it leans on its model.",
        "own",
        "strong",
    ),
    Rule(
        "rehearsal-fell-short",
        fact("rehearsal fell short") & ~fact("no rehearsed remedy held") & ~fact("held as fitted"),
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
)
