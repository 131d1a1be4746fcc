"""Every world, by kind."""

from __future__ import annotations

from tests.simulation import groups, order, places
from tests.simulation.cells import World

KINDS: dict[str, tuple[World, ...]] = {
    "Groups": groups.WORLDS,
    "Order in time": order.WORLDS,
    "Places": places.WORLDS,
}
WORLDS = tuple(world for kind in KINDS.values() for world in kind)
