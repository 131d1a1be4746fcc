"""Cautions from a rehearsal of the advice on the user's own design."""

from __future__ import annotations

from clingstone.advice.expressions import fact
from clingstone.advice.rule import Rule, Then

REHEARSED = (
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
)
