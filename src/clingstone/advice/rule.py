"""The rule table: which facts speak for or against a remedy, with source and strength.

Strength: *strong* = theory and several independent simulations; *moderate* = consistent simulations,
or theory in a narrow setting; *weak* = one study or one field; *convention* = a rule of thumb without
proof. A convention may warn; it never prefers a remedy and never decides a state.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from clingstone.advice.expressions import Expression, fact

Strength = Literal["strong", "moderate", "weak", "convention"]
Kind = Literal["state", "prefer", "refuse", "caveat", "caution"]


@dataclass(frozen=True)
class Then:
    """What follows: a state, a remedy preferred or refused, or words beside the advice.

    kind : "state" and "prefer" decide, the first that holds; "refuse" takes a remedy out; "caveat"
    lowers *supported* to *supported with caveat*; "caution" only warns.
    what : the state, or the remedy id. at : name of the fact that holds its level. firm : it also
    outranks a rehearsal, which cannot see what the rule rests on, unless the remedy falls clearly short.
    """

    kind: Kind
    what: str = ""
    at: str = ""
    needed: str = ""
    firm: bool = False

    def __str__(self) -> str:
        where = f" at the {self.at}" if self.at else ""
        words = {
            "state": f"the state is “{self.what}”",
            "prefer": f"prefer {self.what}"
            + where
            + (", unless a rehearsal speaks clearly against it" if self.firm else ""),
            "refuse": f"refuse {self.what}",
            "caveat": "add a caveat",
            "caution": "add a caution",
        }
        return words[self.kind]


@dataclass(frozen=True)
class Rule:
    """One line of the table. ``because`` may hold {fact names}, filled in when the rule speaks."""

    id: str
    when: Expression
    then: Then
    because: str
    source: str
    strength: Strength

    def __post_init__(self) -> None:
        if self.strength == "convention" and self.then.kind in ("state", "prefer"):
            raise ValueError(f"rule {self.id}: a convention may warn, never decide alone")


GROUP, SERIAL, SPATIAL = fact("group to cover"), fact("serial to cover"), fact("spatial to cover")
ANY = GROUP | SERIAL | SPATIAL
SHOWN = fact("group present") | fact("serial present") | fact("spatial present")
SPREAD, SLOPES = fact("unequal variances"), fact("slopes differ")
KNOWN = fact("columns of the model known")
