"""Places on a lattice, in clusters and at random: a smooth x beside a rough one, dependence near and far."""

from __future__ import annotations

import numpy as np

from clingstone.evidence.registry import by_id
from clingstone.maths.once import Array
from clingstone.remedies import remedy
from tests.remedies.test_places import field
from tests.remedies.test_places_coverage import FAR, LAYOUTS, NEAR, Layout
from tests.remedies.test_places_coverage import world as mapped
from tests.simulation.cells import COVERS, Bound, Covered, Sized, World

DRAWN = 199  # reference draws of the variogram, shared by all columns
SMOOTH, ROUGH = "x1", "x2"


LATTICE = Bound(0.90, 1.0, "an exponential field is no autoregression over neighbours")
IGNORED = Bound(0.0, 0.92, "dependence between places is ignored")


def without(layout: Layout) -> World:
    """Independent rows."""
    made = mapped(layout)[2]

    def draw(rng: np.random.Generator, B: int) -> Array:
        return rng.standard_normal((made.n, B))

    large = Bound(0.02, 0.07, "χ² with 1 df is a law of large samples; there are 80 places")
    found: list[Sized | Covered] = [
        Sized(by_id("moran")),
        Sized(by_id("geary")),
        Sized(by_id("variogram"), draws=DRAWN),
        *(
            Sized(by_id(f"{robust}lm-{kind}"), bound=large)
            for robust in ("", "robust-")
            for kind in ("error", "lag")
        ),
    ]
    return World(f"{layout}, independent", made, draw, found, layout == "random")


def dependent(layout: Layout, reach: float) -> World:
    """0.8 of the variance in an exponential field, the rest row noise."""
    xy, _, made = mapped(layout)

    def draw(rng: np.random.Generator, B: int) -> Array:
        return field(xy, reach, B, rng)

    both = {SMOOTH: COVERS, ROUGH: COVERS}
    found: list[Sized | Covered] = [
        Covered(remedy("ordinary"), {SMOOTH: IGNORED}),
        Covered(remedy("spatial-gls"), both, columns=150, quick=False),
        Covered(remedy("spatial-error"), dict.fromkeys(both, LATTICE), columns=150, quick=False),
        Covered(remedy("spatial-hac"), both, columns=60, quick=False),
        Covered(remedy("spatial-components"), both, columns=150, quick=False),
    ]
    return World(f"{layout}, range {reach:g}", made, draw, found, (layout, reach) == ("clusters", FAR))


WORLDS = (
    *(without(layout) for layout in LAYOUTS),
    *(dependent(layout, reach) for layout in LAYOUTS for reach in (NEAR, FAR)),
)
