"""The last part of the rule table: what lowers the state, and what only warns."""

from __future__ import annotations

from clingstone.advice.cautions_counts import COUNTS
from clingstone.advice.cautions_data import DATA
from clingstone.advice.cautions_fit import FIT
from clingstone.advice.cautions_mean import MEAN
from clingstone.advice.cautions_rehearsed import REHEARSED

CAVEATS = (*MEAN, *COUNTS, *REHEARSED, *FIT, *DATA)
