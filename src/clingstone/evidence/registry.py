"""Every test, in the order in which a reader meets them."""

from __future__ import annotations

from clingstone.evidence.breaks import Break
from clingstone.evidence.direction import Correlogram, Direction
from clingstone.evidence.endogeneity import GroupEndogeneity
from clingstone.evidence.finding import Test
from clingstone.evidence.grouplm import GroupLM
from clingstone.evidence.influence import GroupInfluence
from clingstone.evidence.lagrange import Lagrange
from clingstone.evidence.levels import ClusterLevel
from clingstone.evidence.local import Local
from clingstone.evidence.lookalikes import Duplicates, Heteroscedasticity, Normality, Outliers
from clingstone.evidence.mean import FunctionalForm, Trend, TrendSurface
from clingstone.evidence.nested import GroupF, IntraclassCorrelation, SiteF
from clingstone.evidence.panel import PanelSerial
from clingstone.evidence.portmanteau import BreuschGodfrey, LjungBox
from clingstone.evidence.restricted import RestrictedLR
from clingstone.evidence.season import Season
from clingstone.evidence.serial import DurbinWatson, IrregularSerial, PanelDurbinWatson
from clingstone.evidence.shocks import CommonShocks
from clingstone.evidence.slopes import SlopeVariation
from clingstone.evidence.spatial import Geary, Moran
from clingstone.evidence.variogram import Variogram

TESTS: tuple[Test, ...] = (
    GroupF(),
    IntraclassCorrelation(),
    GroupLM(),
    RestrictedLR(),
    ClusterLevel(),
    GroupEndogeneity(),
    SlopeVariation(),
    DurbinWatson(),
    PanelDurbinWatson(),
    IrregularSerial(),
    BreuschGodfrey(),
    LjungBox(),
    PanelSerial(),
    CommonShocks(),
    Moran(),
    Geary(),
    SiteF(),
    Variogram(),
    Correlogram(),
    Direction(),
    Local(),
    Lagrange("lm-error"),
    Lagrange("lm-lag"),
    Lagrange("robust-lm-error"),
    Lagrange("robust-lm-lag"),
    FunctionalForm(),
    Trend(),
    Season(),
    Break(),
    TrendSurface(),
    Heteroscedasticity(),
    Outliers(),
    GroupInfluence(),
    Normality(),
    Duplicates(),
)


def by_id(test: str) -> Test:
    """The registered test of an id. Raises KeyError."""
    for found in TESTS:
        if found.id == test:
            return found
    raise KeyError(test)
