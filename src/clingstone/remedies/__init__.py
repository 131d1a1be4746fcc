"""Remedies: what else can be reported in place of the ordinary intervals."""

from __future__ import annotations

from clingstone.needs import InputError
from clingstone.remedies.between import WithinBetween
from clingstone.remedies.components import SpatialComponents
from clingstone.remedies.gls import Gls
from clingstone.remedies.groupt import GroupT
from clingstone.remedies.jackknife import ClusterJackknife
from clingstone.remedies.longrun import Hac
from clingstone.remedies.means import GroupMeans
from clingstone.remedies.mixed import MixedSlope
from clingstone.remedies.mixedrobust import MixedRobust
from clingstone.remedies.multiway import MultiwayCluster
from clingstone.remedies.periods import PanelHac
from clingstone.remedies.randomisation import Randomisation
from clingstone.remedies.refit import explain, refit
from clingstone.remedies.regions import RegionCluster
from clingstone.remedies.remedy import Remedy
from clingstone.remedies.resampled import WildClusterBootstrap
from clingstone.remedies.sandwich import ClusterRobust, HeteroscedasticityRobust, Ordinary
from clingstone.remedies.serial import Arma, Car1
from clingstone.remedies.spatial import SpatialError
from clingstone.remedies.spatialhac import SpatialHac
from clingstone.remedies.unstructured import Unstructured
from clingstone.remedies.within import FixedEffects

REMEDIES: tuple[Remedy, ...] = (
    Ordinary(),
    HeteroscedasticityRobust(),
    ClusterRobust(),
    ClusterJackknife(),
    WildClusterBootstrap(),
    MultiwayCluster(),
    Randomisation(),
    GroupMeans(),
    GroupT(),
    FixedEffects(),
    WithinBetween(),
    Gls("mixed-intercept", df="kenward-roger"),
    MixedSlope(),
    MixedRobust(),
    Unstructured(),
    Gls("ar1"),
    Car1(),
    Arma(),
    Hac(),
    PanelHac(),
    Gls("spatial-gls"),
    SpatialError(),
    SpatialHac(),
    SpatialComponents(),
    RegionCluster(),
    Gls("joint"),
)


def remedy(id: str) -> Remedy:
    """The registered remedy of an id. Raises InputError with the known ids."""
    for found in REMEDIES:
        if found.id == id:
            return found
    known = ", ".join(r.id for r in REMEDIES)
    raise InputError(f"there is no remedy named {id!r}", f"Known: {known}.")


__all__ = ["REMEDIES", "explain", "refit", "remedy"]
