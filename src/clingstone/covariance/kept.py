"""Pure values that this room works out from a design or a response, kept with it."""

from __future__ import annotations

from collections.abc import Callable, Hashable
from typing import Any, TypeVar

T = TypeVar("T")


def kept(owner: Any, key: tuple[Hashable, ...], make: Callable[[], T]) -> T:
    """``make()``, once per owner and key, in the store of :func:`clingstone.maths.once.once`.

    For values of a frozen object that its own class cannot know: the store lives and dies with the
    object, so nothing is held longer than the rows it was made from.
    """
    store: dict[Any, Any] = owner.__dict__.setdefault("_once", {})
    place = ("covariance", *key)
    if place not in store:
        store[place] = make()
    found: T = store[place]
    return found
